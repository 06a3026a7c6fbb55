package config

import (
	"bytes"
	"fmt"
	"strconv"
	"time"

	"github.com/goccy/go-yaml"
	"github.com/nats-io/nkeys"

	"selvage/internal/keys"
)

// Roster is the list of who is enrolled in a fleet, by public key.
type Roster struct {
	Fleet  string  `yaml:"fleet"`
	Base   string  `yaml:"base"` // public key
	URL    string  `yaml:"url"`  // where robots reach the base
	Robots []Robot `yaml:"robots"`
}

// Robot is one key of a robot. A robot that got a new key has several, of which all but the last are revoked.
type Robot struct {
	Name     string    `yaml:"name"`
	Key      string    `yaml:"key"` // public
	Enrolled time.Time `yaml:"enrolled"`
	Revoked  time.Time `yaml:"revoked,omitempty"` // zero while the key is good
}

// maxRobots bounds a roster.
const maxRobots = 1000

// ReadRoster reads robots.yaml.
func ReadRoster(path string) (*Roster, error) {
	return read(path, (*Roster).check)
}

func (r *Roster) check(c *check) {
	c.names(r.Fleet, "fleet")
	c.demand(nkeys.IsValidPublicUserKey(r.Base), "base", quote(r.Base), "the public key of the base")
	c.demand(secure(r.URL), "url", quote(r.URL), "tls://HOST:PORT")
	c.demand(len(r.Robots) <= maxRobots, "robots", strconv.Itoa(len(r.Robots))+" robots", "at most "+strconv.Itoa(maxRobots))
	good, owner := map[string]bool{}, map[string]string{r.Base: "the base"}
	for i := range r.Robots {
		x, at := &r.Robots[i], "robots["+strconv.Itoa(i)+"]"
		c.robot(x.Name, at+".name")
		c.demand(nkeys.IsValidPublicUserKey(x.Key), at+".key", quote(x.Key), "a public key, U and 55 characters more")
		c.demand(owner[x.Key] == "", at+".key", "the key of "+owner[x.Key], "a key of its own")
		c.demand(!x.Enrolled.IsZero(), at+".enrolled", "nothing", "a time")
		owner[x.Key] = x.Name
		if x.Revoked.IsZero() {
			c.demand(!good[x.Name], at+".name", x.Name+" a second time", "one key for each robot that is not revoked")
			good[x.Name] = true
		}
	}
}

// Marshal writes the roster.
func (r *Roster) Marshal() ([]byte, error) {
	var b bytes.Buffer
	fmt.Fprintf(&b, "# Who is enrolled. This file is written by selvage enrol; a change by hand is lost with the next one.\n")
	if err := yaml.NewEncoder(&b).Encode(r); err != nil {
		return nil, fmt.Errorf("roster: %w", err)
	}
	return b.Bytes(), nil
}

// Good returns the public keys by name of the robots that may connect.
func (r *Roster) Good() map[string]string {
	good := map[string]string{}
	for i := range r.Robots {
		if x := &r.Robots[i]; x.Revoked.IsZero() {
			good[x.Name] = x.Key
		}
	}
	return good
}

// Names returns all robots that were ever enrolled, in the order in which they came: what a robot whose key is revoked had measured
// before stays.
func (r *Roster) Names() []string {
	var all []string
	seen := map[string]bool{}
	for i := range r.Robots {
		if name := r.Robots[i].Name; !seen[name] {
			seen[name] = true
			all = append(all, name)
		}
	}
	return all
}

// Ring makes the ring that verifies what the robots and the base sign.
func (r *Roster) Ring() (*keys.Ring, error) {
	all := make([]keys.Robot, len(r.Robots))
	for i := range r.Robots {
		x := &r.Robots[i]
		all[i] = keys.Robot{Name: x.Name, Public: x.Key}
		if !x.Revoked.IsZero() {
			all[i].RevokedNS = x.Revoked.UnixNano()
		}
	}
	return keys.NewRing(r.Base, all)
}
