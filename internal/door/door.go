// Package door decides which messages of a fleet reach a core. What does not carry the signature of the party its subject belongs
// to, or is on no subject of the fleet, stays outside; what a core refuses is counted here too. Refusals are counted by sender, kind
// and reason, and told about sparingly: nobody can fill a log by sending rubbish.
//
// The sender that is counted is the one whose subject it is. A stranger can make the bus put a message there by way of a reply
// subject, so a count tells who is being disturbed, and only with a good signature also by whom.
package door

import (
	"cmp"
	"errors"
	"fmt"
	"maps"
	"slices"
	"strings"
	"sync"

	"selvage/internal/keys"
	"selvage/msgs"
)

// Reason is why a message was refused.
type Reason string

// The reasons.
const (
	Unsigned  Reason = "unsigned"  // no signature where the fleet signs
	Forged    Reason = "forged"    // a signature by somebody else, for another subject or over another message
	Revoked   Reason = "revoked"   // a signature with a key that was revoked before
	Unknown   Reason = "unknown"   // a robot that is not of the fleet
	Foreign   Reason = "foreign"   // a subject that is none of the fleet
	Newer     Reason = "newer"     // a message format that is too new
	Malformed Reason = "malformed" // not a message of its kind
	Unwanted  Reason = "unwanted"  // refused for what it says
)

// Others is the sender of what cannot be said to be anybody's.
const Others = "others"

// Base is the sender of what is on the subjects of the base, rulings among them. No robot may be confused with it: it is no name.
const Base = "(base)"

var (
	errUnknown = errors.New("a robot that is not of the fleet")
	errForeign = errors.New("a subject that is not of the fleet")
)

// quiet is the least time between two warnings of the same, nanoseconds.
const quiet = 60e9

// Count is how many messages were refused.
type Count struct {
	Source string // a robot, Base or Others
	Kind   string // as in package msgs, empty when not known
	Reason Reason
	N      uint64
}

// Door is used by several goroutines. It forgets nothing; what it remembers is bounded by the robots of the fleet.
type Door struct {
	fleet    string
	robots   []string
	verifier msgs.Verifier
	warn     func(error)

	mu    sync.Mutex
	count map[Count]uint64 // by Count without N
	told  map[Count]*telling
}

type telling struct {
	atNS    int64
	quietly uint64 // refusals since that nobody was told of
}

// New makes the door of these robots, on a robot of itself alone. Without a verifier signatures are not looked at: that is for a fleet
// that does not sign.
func New(fleet string, robots []string, verifier msgs.Verifier, warn func(error)) *Door {
	return &Door{
		fleet: fleet, robots: slices.Clone(robots), verifier: verifier, warn: warn, count: map[Count]uint64{}, told: map[Count]*telling{},
	}
}

// Admit tells whether a message may come in that the bus stored at storedNS by the clock of the base. Of refusals of one sender it
// warns once a minute at most.
func (d *Door) Admit(nowNS int64, subject string, storedNS int64, payload []byte) bool {
	err := d.check(subject, storedNS, payload)
	if err != nil {
		d.refuse(nowNS, subject, err, func(c Count) Count { return Count{Source: c.Source} })
	}
	return err == nil
}

func (d *Door) check(subject string, storedNS int64, payload []byte) error {
	at, err := msgs.ParseSubject(subject)
	switch {
	case err != nil:
		return fmt.Errorf("%w: %w", errForeign, err)
	case at.Fleet != d.fleet:
		return errForeign
	case at.Robot != "" && !slices.Contains(d.robots, at.Robot):
		return errUnknown
	case d.verifier == nil:
		return nil
	}
	return msgs.Verify(subject, storedNS, payload, d.verifier)
}

// Refuse counts a message that came in and was refused after all. Of refusals of one sender, kind and reason it warns once a minute
// at most.
func (d *Door) Refuse(nowNS int64, subject string, err error) {
	d.refuse(nowNS, subject, err, func(c Count) Count { return c })
}

func (d *Door) refuse(nowNS int64, subject string, err error, group func(Count) Count) {
	c := d.classify(subject, err)
	d.mu.Lock()
	d.count[c]++
	t := d.told[group(c)]
	tell, missed := t == nil || nowNS-t.atNS >= quiet, uint64(0)
	switch {
	case !tell:
		t.quietly++
	case t == nil:
		d.told[group(c)] = &telling{atNS: nowNS}
	default:
		missed = t.quietly
		*t = telling{atNS: nowNS}
	}
	d.mu.Unlock()
	if !tell {
		return
	}
	err = fmt.Errorf("%s: %w", subject, err)
	if missed > 0 {
		err = fmt.Errorf("%w (and %d more since the last was told)", err, missed)
	}
	d.warn(err)
}

func (d *Door) classify(subject string, err error) Count {
	c := Count{Source: Others, Reason: Unwanted}
	if t := strings.SplitN(subject, ".", 4); len(t) > 1 && t[1] == d.fleet {
		switch {
		case t[0] != "up":
			c.Source = Base
		case len(t) > 2 && slices.Contains(d.robots, t[2]):
			c.Source = t[2]
		}
	}
	if at, err := msgs.ParseSubject(subject); err == nil && at.Fleet == d.fleet {
		c.Kind = at.Kind
	}
	var newer *msgs.VersionError
	var malformed *msgs.FieldError
	switch {
	case errors.Is(err, msgs.ErrUnsigned):
		c.Reason = Unsigned
	case errors.Is(err, keys.ErrForged):
		c.Reason = Forged
	case errors.Is(err, keys.ErrRevoked):
		c.Reason = Revoked
	case errors.Is(err, keys.ErrUnknown), errors.Is(err, errUnknown):
		c.Reason = Unknown
	case errors.Is(err, errForeign):
		c.Reason = Foreign
	case errors.As(err, &newer):
		c.Reason = Newer
	case errors.As(err, &malformed):
		c.Reason = Malformed
	}
	return c
}

// Counts returns what was refused so far, in the order of source, kind and reason.
func (d *Door) Counts() []Count {
	d.mu.Lock()
	defer d.mu.Unlock()
	all := slices.SortedFunc(maps.Keys(d.count), func(a, b Count) int {
		return cmp.Or(cmp.Compare(a.Source, b.Source), cmp.Compare(a.Kind, b.Kind), cmp.Compare(a.Reason, b.Reason))
	})
	for i := range all {
		all[i].N = d.count[all[i]]
	}
	return all
}
