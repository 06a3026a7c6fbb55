// Package enrol makes what the computers of a fleet need to know each other: a key for the base and for each robot, a certificate
// authority of the fleet's own with the certificate of the base, and for each computer one folder with all that goes onto it.
//
//	authority/       ca.key, ca.crt                                      to be kept away from the network
//	base/            base.yaml, base.seed, robots.yaml, ca.crt, server.crt, server.key, selvage-base.service, README
//	robots/ROBOT/    agent.yaml, robot.seed, ca.crt, selvage-agent.service, README
//
// Files have mode 0600, folders 0700. A folder appears whole or not at all, and nothing is written over but base/robots.yaml, the
// list of public keys, which is replaced in one step when a robot is added or revoked. Secrets are in the files and nowhere else.
package enrol
