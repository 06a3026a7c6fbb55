// Package keys holds who may speak in a fleet: the secret key of one party, and the public keys of all.
//
// A key is an Ed25519 key written as an NKey: a seed (SU...) and a public key (U...). The same key opens the connection to the bus and
// signs messages; what is signed in either case can never be the same, see package msgs.
//
// A seed lies in a file that nobody but its owner may read, and never leaves this package otherwise: a [Pair] prints as its public
// key, whatever it is printed with.
//
// A [Ring] tells whether a signature is that of the robot it is said to be of. A key that was revoked still counts for what the base
// had stored before: whether a robot that was lost had measured well is for a person to rule.
package keys
