package keys

import (
	"bytes"
	"crypto/ed25519"
	"crypto/rand"
	"errors"
	"fmt"
	"io"
	"os"

	"github.com/nats-io/nkeys"
)

// Pair is the secret key of one party with its public key.
type Pair struct {
	public string
	sign   func(text []byte) []byte // holds the secret: a function prints as nothing that matters
}

// maxSeed bounds a seed file; a seed has 58 characters.
const maxSeed = 256

// Load reads the seed in a file. Only its owner may be allowed to read it, and nobody to execute it: mode 0600 or 0400.
func Load(path string) (*Pair, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	info, err := f.Stat()
	if err != nil {
		return nil, err
	}
	if !info.Mode().IsRegular() {
		return nil, fmt.Errorf("%s: found %s, expected a file with a seed", path, info.Mode().Type())
	}
	if mode := info.Mode().Perm(); mode&^0o600 != 0 {
		return nil, fmt.Errorf("%s: found mode %04o, expected 0600: others could read the secret (chmod 600)", path, mode)
	}
	text, err := io.ReadAll(io.LimitReader(f, maxSeed+1))
	defer clear(text)
	if err != nil {
		return nil, err
	}
	prefix, secret, err := nkeys.DecodeSeed(bytes.TrimSpace(text))
	if err != nil || prefix != nkeys.PrefixByteUser || len(text) > maxSeed {
		return nil, fmt.Errorf("%s: expected the seed of a user, SU and 56 characters more; what was found is not shown", path)
	}
	defer clear(secret)
	return pair(secret)
}

// Create makes a key, writes its seed to a new file of mode 0600 and returns the public key. A file that exists is an error.
func Create(path string) (public string, err error) {
	secret := make([]byte, ed25519.SeedSize)
	defer clear(secret)
	rand.Read(secret) // never fails
	p, err := pair(secret)
	if err != nil {
		return "", err
	}
	text, err := nkeys.EncodeSeed(nkeys.PrefixByteUser, secret)
	if err != nil {
		return "", err
	}
	text = append(text, '\n')
	defer clear(text)
	f, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o600)
	if err != nil {
		return "", err
	}
	_, err = f.Write(text)
	err = errors.Join(err, f.Chmod(0o600), f.Sync(), f.Close())
	if err != nil {
		return "", errors.Join(err, os.Remove(path))
	}
	return p.public, nil
}

func pair(secret []byte) (*Pair, error) {
	private := ed25519.NewKeyFromSeed(secret)
	public, err := nkeys.Encode(nkeys.PrefixByteUser, private.Public().(ed25519.PublicKey))
	if err != nil {
		return nil, err
	}
	return &Pair{string(public), func(text []byte) []byte { return ed25519.Sign(private, text) }}, nil
}

// Public is the public key.
func (p *Pair) Public() string { return p.public }

// Sign returns the signature over text, 64 bytes.
func (p *Pair) Sign(text []byte) ([]byte, error) { return p.sign(text), nil }

// String is the public key, so that a log may name it.
func (p Pair) String() string { return p.public }

// Format prints the public key whatever the verb.
func (p Pair) Format(f fmt.State, _ rune) { io.WriteString(f, p.public) }

// MarshalText writes the public key, for JSON and logs.
func (p Pair) MarshalText() ([]byte, error) { return []byte(p.public), nil }
