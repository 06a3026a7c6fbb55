package keys

import (
	"bytes"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/goccy/go-yaml"
	"github.com/nats-io/nkeys"
	"github.com/rs/zerolog"

	"selvage/msgs"
)

var (
	_ msgs.Signer   = (*Pair)(nil)
	_ msgs.Verifier = (*Ring)(nil)
)

func create(t testing.TB) (path string, p *Pair) {
	t.Helper()
	path = filepath.Join(t.TempDir(), "seed")
	public, err := Create(path)
	if err == nil {
		p, err = Load(path)
	}
	if err != nil {
		t.Fatal(err)
	}
	if p.Public() != public {
		t.Fatalf("made %s, read %s", public, p.Public())
	}
	return path, p
}

func unhex(t *testing.T, s string) []byte {
	t.Helper()
	b, err := hex.DecodeString(s)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// The first three vectors of RFC 8032, Edwards-Curve Digital Signature Algorithm, 2017, section 7.1.
func TestPublishedSignatures(t *testing.T) {
	for _, c := range []struct{ secret, public, text, signature string }{
		{
			"9d61b19deffd5a60ba844af492ec2cc44449c5697b326919703bac031cae7f60", "d75a980182b10ab7d54bfed3c964073a0ee172f3daa62325af021a68f707511a", "",
			"e5564300c360ac729086e2cc806e828a84877f1eb8e5d974d873e065224901555fb8821590a33bacc61e39701cf9b46bd25bf5f0595bbe24655141438e7a100b",
		}, {
			"4ccd089b28ff96da9db6c346ec114e0f5b8a319f35aba624da8cf6ed4fb8a6fb", "3d4017c3e843895a92b70aa74d1b7ebc9c982ccf2ec4968cc0cd55f12af4660c", "72",
			"92a009a9f0d4cab8720e820b5f642540a2b27b5416503f8fb3762223ebdb69da085ac1e43e15996e458f3613d0f11d8c387b2eaeb4302aeeb00d291612bb0c00",
		}, {
			"c5aa8df43f9f837bedb7442f31dcb7b166d38535076f094b85ce3a2e0b4458f7", "fc51cd8e6218a1a38da47ed00230f0580816ed13ba3303ac5deb911548908025", "af82",
			"6291d657deec24024827e69c3abe01a30ce548a284743a445e3680d7db5ac3ac18ff9b538d16f290ae67f760984dc6594a7c15e9716ed28dc027beceea1ec40a",
		},
	} {
		seed, err := nkeys.EncodeSeed(nkeys.PrefixByteUser, unhex(t, c.secret))
		if err != nil {
			t.Fatal(err)
		}
		path := filepath.Join(t.TempDir(), "seed")
		if err := os.WriteFile(path, seed, 0o600); err != nil {
			t.Fatal(err)
		}
		p, err := Load(path)
		if err != nil {
			t.Fatal(err)
		}
		raw, err := nkeys.Decode(nkeys.PrefixByteUser, []byte(p.Public()))
		if err != nil || hex.EncodeToString(raw) != c.public {
			t.Errorf("public key %x, %v, want %s", raw, err, c.public)
		}
		text := unhex(t, c.text)
		signature, err := p.Sign(text)
		if err != nil || hex.EncodeToString(signature) != c.signature {
			t.Errorf("signature %x, %v, want %s", signature, err, c.signature)
		}
		ring, err := NewRing(p.Public(), nil)
		if err != nil {
			t.Fatal(err)
		}
		if err := ring.Verify("", 0, text, signature); err != nil {
			t.Error(err)
		}
	}
}

// A seed that Create writes is one for the library of the bus, and both make the same signatures.
func TestAgainstTheLibrary(t *testing.T) {
	path, p := create(t)
	seed, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	other, err := nkeys.FromSeed(bytes.TrimSpace(seed))
	if err != nil {
		t.Fatal(err)
	}
	if public, err := other.PublicKey(); err != nil || public != p.Public() {
		t.Errorf("public key %s, %v, want %s", p.Public(), err, public)
	}
	text := []byte("what is to be signed")
	want, err := other.Sign(text)
	if err != nil {
		t.Fatal(err)
	}
	if got, err := p.Sign(text); err != nil || !bytes.Equal(got, want) {
		t.Errorf("signature %x, %v, want %x", got, err, want)
	}
}

func TestASeedIsForItsOwnerOnly(t *testing.T) {
	path, _ := create(t)
	info, err := os.Stat(path)
	if err != nil || info.Mode() != 0o600 {
		t.Fatalf("mode %v, %v", info.Mode(), err)
	}
	if _, err := Create(path); !errors.Is(err, os.ErrExist) {
		t.Errorf("a seed was written over another: %v", err)
	}
	seed, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for mode := range os.FileMode(0o1000) {
		if err := os.Chmod(path, mode); err != nil {
			t.Fatal(err)
		}
		_, err := Load(path)
		if mode&0o177 == 0 && mode&0o400 != 0 {
			if err != nil {
				t.Errorf("mode %04o: %v", mode, err)
			}
			continue
		}
		if os.Geteuid() == 0 && mode&0o177 == 0 {
			continue // whoever may do everything can read what nobody may
		}
		if err == nil {
			t.Errorf("mode %04o was read", mode)
		} else if leaks(err.Error(), seed) {
			t.Errorf("mode %04o: the error tells the seed", mode)
		}
	}
}

// leaks tells whether a text has part of a seed in it: eight characters, or the bytes in hexadecimal.
func leaks(text string, seed []byte) bool {
	s := string(bytes.TrimSpace(seed))
	for i := range len(s) - 8 {
		if strings.Contains(text, s[i:i+8]) {
			return true
		}
	}
	_, raw, err := nkeys.DecodeSeed([]byte(s))
	if err != nil {
		panic(err)
	}
	lower := strings.ToLower(text)
	decimal := strings.Trim(fmt.Sprint(raw[:6]), "[]")
	return strings.Contains(lower, hex.EncodeToString(raw[:4])) || strings.Contains(text, decimal) || strings.Contains(text, strings.ReplaceAll(decimal, " ", ","))
}

func TestLoadRefuses(t *testing.T) {
	account, err := nkeys.CreateAccount()
	if err != nil {
		t.Fatal(err)
	}
	foreign, err := account.Seed()
	if err != nil {
		t.Fatal(err)
	}
	path, p := create(t)
	good, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	flipped := bytes.Clone(good)
	flipped[20] ^= 1
	for name, text := range map[string][]byte{
		"nothing": nil, "a public key": []byte(p.Public()), "the seed of an account": foreign, "a seed cut short": good[:50],
		"a seed with a wrong character": flipped, "two seeds": append(bytes.Clone(good), good...), "much": bytes.Repeat([]byte(" "), 1<<20),
		"a seed behind much": append(bytes.Repeat([]byte("\n"), maxSeed), good...),
	} {
		if err := os.WriteFile(path, text, 0o600); err != nil {
			t.Fatal(err)
		}
		if _, err := Load(path); err == nil || !strings.Contains(err.Error(), "expected the seed of a user") {
			t.Errorf("%s: %v", name, err)
		} else if leaks(err.Error(), good) {
			t.Errorf("%s: the error tells the seed: %v", name, err)
		}
	}
	if _, err := Load(filepath.Dir(path)); err == nil || !strings.Contains(err.Error(), "expected a file") {
		t.Errorf("a folder: %v", err)
	}
	if _, err := Load(path + ".none"); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("no file: %v", err)
	}
}

// Whatever a pair is printed with, and whatever holds it, its secret does not come out.
func TestAPairNeverTellsItsSecret(t *testing.T) {
	path, p := create(t)
	seed, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	hidden := struct {
		pair  Pair
		ptr   *Pair
		Named any
	}{*p, p, p}
	var out bytes.Buffer
	for _, x := range []any{p, *p, hidden, &hidden, []*Pair{p}, []Pair{*p}, map[string]any{"a": *p}} {
		for _, verb := range []string{"%v", "%+v", "%#v", "%s", "%q", "%x", "%X", "%d"} {
			fmt.Fprintf(&out, verb+"\n", x)
		}
		log := zerolog.New(&out)
		log.Info().Interface("key", x).Any("any", x).Msg(fmt.Sprint(x))
		if err := json.NewEncoder(&out).Encode(x); err != nil {
			t.Error(err)
		}
		if err := yaml.NewEncoder(&out).Encode(x); err != nil {
			t.Error(err)
		}
	}
	log := zerolog.New(&out)
	log.Info().Stringer("key", p).Err(fmt.Errorf("with %v", p)).Send()
	if leaks(out.String(), seed) {
		t.Errorf("the seed %s is in\n%s", seed, out.String())
	}
	if !strings.Contains(out.String(), p.Public()) {
		t.Error("the public key is not shown")
	}
	if !leaks(string(seed), seed) {
		t.Error("the test finds nothing")
	}
}

func TestRing(t *testing.T) {
	_, base := create(t)
	_, r1 := create(t)
	_, lost := create(t)
	_, again := create(t)
	ring, err := NewRing(base.Public(), []Robot{
		{Name: "r1", Public: r1.Public()}, {Name: "r2", Public: lost.Public(), RevokedNS: 1000}, {Name: "r2", Public: again.Public()},
	})
	if err != nil {
		t.Fatal(err)
	}
	text := []byte("text")
	for _, c := range []struct {
		robot string
		by    *Pair
		at    int64
		want  error
	}{
		{"", base, 0, nil}, {"r1", r1, 1 << 62, nil}, {"r2", lost, 999, nil}, {"r2", again, 0, nil}, {"r2", again, 5000, nil},
		{"r2", lost, 1000, ErrRevoked}, {"r2", lost, 1 << 62, ErrRevoked}, {"r2", r1, 0, ErrForged}, {"r1", base, 0, ErrForged},
		{"", r1, 0, ErrForged}, {"r3", r1, 0, ErrUnknown}, {"base", base, 0, ErrUnknown},
	} {
		signature, err := c.by.Sign(text)
		if err != nil {
			t.Fatal(err)
		}
		if err := ring.Verify(c.robot, c.at, text, signature); !errors.Is(err, c.want) {
			t.Errorf("%q at %d: %v, want %v", c.robot, c.at, err, c.want)
		}
		if err := ring.Verify(c.robot, c.at, []byte("another text"), signature); err == nil {
			t.Errorf("%q: another text verifies", c.robot)
		}
		for _, wrong := range [][]byte{nil, signature[:63], append(bytes.Clone(signature), 0), make([]byte, 64)} {
			if err := ring.Verify(c.robot, c.at, text, wrong); err == nil {
				t.Errorf("%q: signature of %d bytes verifies", c.robot, len(wrong))
			}
		}
	}
}

func TestNewRingRefuses(t *testing.T) {
	_, base := create(t)
	_, r1 := create(t)
	for _, c := range []struct {
		want   string
		base   string
		robots []Robot
	}{
		{"public key of the base: found \"\"", "", nil},
		{"public key of robot r1: found \"nonsense\"", base.Public(), []Robot{{Name: "r1", Public: "nonsense"}}},
		{"public key of robot r1", base.Public(), []Robot{{Name: "r1", Public: r1.Public()[:55]}}},
		{"robot r1 has the key of the base", base.Public(), []Robot{{Name: "r1", Public: base.Public()}}},
		{"robot r2 has the key of robot r1", base.Public(), []Robot{{Name: "r1", Public: r1.Public()}, {Name: "r2", Public: r1.Public()}}},
	} {
		if _, err := NewRing(c.base, c.robots); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%v, want %s", err, c.want)
		}
	}
}

// BenchmarkSignature signs and verifies messages as long as a tie, a small summary, a chunk and a large summary.
func BenchmarkSignature(b *testing.B) {
	_, p := create(b)
	ring, err := NewRing(p.Public(), []Robot{})
	if err != nil {
		b.Fatal(err)
	}
	const subject = "down.f.r1.corr"
	for _, size := range []int{300, 20 << 10, msgs.ChunkSize, 1 << 20} {
		body := append([]byte{0x4a, byte(size) | 0x80, byte(size>>7) | 0x80, byte(size >> 14)}, make([]byte, size)...) // field 9
		signed, err := msgs.Sign(subject, body, p)
		if err != nil {
			b.Fatal(err)
		}
		b.Run(fmt.Sprintf("sign/%d bytes", size), func(b *testing.B) {
			b.SetBytes(int64(size))
			for b.Loop() {
				if _, err := msgs.Sign(subject, body, p); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run(fmt.Sprintf("verify/%d bytes", size), func(b *testing.B) {
			b.SetBytes(int64(size))
			for b.Loop() {
				if err := msgs.Verify(subject, 0, signed, ring); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
