package bus

import (
	"crypto/tls"
	"errors"
	"fmt"
	"maps"
	"slices"
	"strings"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nkeys"
)

// Access says who may connect to a server and what each may do. The base may do everything. A robot may do what its side of this
// package needs, and nothing that shows it or changes what belongs to another robot.
//
// What it cannot keep a robot from is naming the subject of another for a reply: the server checks that a robot may publish, not
// where the acknowledgement goes. The robot cannot choose what is then stored there, and it carries no signature.
type Access struct {
	Fleet       string
	Base        string            // public key
	Robots      map[string]string // public keys by name
	Certificate tls.Certificate   // of the server
}

// check finds what the server would find only when somebody connects, or not at all.
func (a *Access) check() error {
	if !token(a.Fleet) {
		return fmt.Errorf("bus: fleet %q, expected a single token of a subject", a.Fleet)
	}
	if !nkeys.IsValidPublicUserKey(a.Base) {
		return fmt.Errorf("bus: %.64q, expected the public key of the base", a.Base)
	}
	owner := map[string]string{a.Base: "the base"}
	for _, robot := range slices.Sorted(maps.Keys(a.Robots)) {
		key := a.Robots[robot]
		switch {
		case !token(robot):
			return fmt.Errorf("bus: robot %q, expected a single token of a subject", robot)
		case !nkeys.IsValidPublicUserKey(key):
			return fmt.Errorf("bus: %.64q, expected the public key of robot %s", key, robot)
		case owner[key] != "":
			return fmt.Errorf("bus: robot %s has the key of %s", robot, owner[key])
		}
		owner[key] = "robot " + robot
	}
	return nil
}

// token tells whether a name can be part of a subject.
func token(name string) bool { return name != "" && !strings.ContainsAny(name, ".*> \t\r\n") }

// users lists who may log in.
func (a *Access) users() []*server.NkeyUser {
	all := []*server.NkeyUser{{Nkey: a.Base}}
	for _, robot := range slices.Sorted(maps.Keys(a.Robots)) {
		all = append(all, &server.NkeyUser{Nkey: a.Robots[robot], Permissions: permissions(a.Fleet, robot)})
	}
	return all
}

// permissions are what Publish, PublishNewest, PublishHeartbeat, Newest, Follow and Consume take on a robot.
func permissions(fleet, robot string) *server.Permissions {
	up, down := "up."+fleet+"."+robot, "down."+fleet+"."+robot
	reader := VerdictStream(fleet) + "." + robot
	return &server.Permissions{
		Publish: &server.SubjectPermission{Allow: []string{
			up + ".hb", up + ".tie", up + ".summary", up + ".summary.>",
			"$JS.API.DIRECT.GET." + CorrectionStream(fleet) + "." + down + ".corr",
			"$JS.API.DIRECT.GET." + CorrectionStream(fleet) + "." + down + ".want",
			"$JS.API.CONSUMER.INFO." + reader, "$JS.API.CONSUMER.MSG.NEXT." + reader, "$JS.ACK." + reader + ".>",
		}},
		Subscribe: &server.SubjectPermission{Allow: []string{down + ".corr", down + ".want", answers(robot) + ".>"}},
	}
}

// answers is where the answers to the requests of a client go.
func answers(name string) string { return "_INBOX_" + name }

// SetRobots lets in these robots from now on, by their public keys, and ends the connections of others; whoever stays, stays
// connected. The server must have been started with an Access. It is not for several goroutines at once.
func (s *Server) SetRobots(robots map[string]string) error {
	if s.options.Access == nil {
		return errors.New("bus: the server lets everybody in")
	}
	access := *s.options.Access
	access.Robots = maps.Clone(robots)
	o := s.options
	o.Access = &access
	so, err := o.server(s.tls)
	if err != nil {
		return err
	}
	if err := s.nats.ReloadOptions(so); err != nil {
		return fmt.Errorf("bus: %w", err)
	}
	s.options = o
	s.door.setRobots(access.Robots)
	return nil
}
