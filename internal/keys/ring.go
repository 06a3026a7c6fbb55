package keys

import (
	"crypto/ed25519"
	"errors"
	"fmt"

	"github.com/nats-io/nkeys"
)

// Why a signature does not count.
var (
	ErrUnknown = errors.New("nobody of that name is enrolled")
	ErrForged  = errors.New("the signature is not that of the sender")
	ErrRevoked = errors.New("the key was revoked before the message came")
)

// Robot is one key of one robot. A robot that was given a new one after a loss has several.
type Robot struct {
	Name      string
	Public    string
	RevokedNS int64 // what the base stores from this moment on does not count; 0 while the key is good
}

// Ring knows the public keys of a fleet. It does not change, and may be used by several goroutines.
type Ring struct {
	base   ed25519.PublicKey
	robots map[string][]entry
}

type entry struct {
	public    ed25519.PublicKey
	revokedNS int64
}

// NewRing makes a ring of the public keys of the base and of robots; a robot needs none of the others.
func NewRing(base string, robots []Robot) (*Ring, error) {
	r := &Ring{robots: map[string][]entry{}}
	var err error
	if r.base, err = decode(base); err != nil {
		return nil, fmt.Errorf("public key of the base: %w", err)
	}
	owner := map[string]string{string(r.base): "the base"}
	for _, x := range robots {
		public, err := decode(x.Public)
		if err != nil {
			return nil, fmt.Errorf("public key of robot %s: %w", x.Name, err)
		}
		if other := owner[string(public)]; other != "" {
			return nil, fmt.Errorf("robot %s has the key of %s", x.Name, other)
		}
		owner[string(public)] = "robot " + x.Name
		r.robots[x.Name] = append(r.robots[x.Name], entry{public, x.RevokedNS})
	}
	return r, nil
}

func decode(public string) (ed25519.PublicKey, error) {
	b, err := nkeys.Decode(nkeys.PrefixByteUser, []byte(public))
	if err != nil || len(b) != ed25519.PublicKeySize {
		return nil, fmt.Errorf("found %.64q, expected U and 55 characters more", public)
	}
	return b, nil
}

// Verify returns nil when the signature over text is by this robot, or by the base when robot is empty, with a key that counted at
// the time at which the message was stored, nanoseconds of the clock of the base.
func (r *Ring) Verify(robot string, storedNS int64, text, signature []byte) error {
	if robot == "" {
		if !ed25519.Verify(r.base, text, signature) {
			return ErrForged
		}
		return nil
	}
	keys := r.robots[robot]
	if len(keys) == 0 {
		return ErrUnknown
	}
	for _, k := range keys {
		if ed25519.Verify(k.public, text, signature) {
			if k.revokedNS != 0 && storedNS >= k.revokedNS {
				return ErrRevoked
			}
			return nil
		}
	}
	return ErrForged
}
