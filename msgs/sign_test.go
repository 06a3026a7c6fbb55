package msgs

import (
	"bytes"
	"crypto/ed25519"
	"errors"
	"strings"
	"testing"

	"google.golang.org/protobuf/encoding/protowire"
	"pgregory.net/rapid"
)

// party signs with a key made of its name.
type party string

func (p party) key() ed25519.PrivateKey {
	seed := make([]byte, ed25519.SeedSize)
	copy(seed, p)
	return ed25519.NewKeyFromSeed(seed)
}

func (p party) Sign(text []byte) ([]byte, error) { return ed25519.Sign(p.key(), text), nil }

// parties verifies by name, the base under "base".
type parties struct{}

var errForged = errors.New("forged")

func (parties) Verify(robot string, _ int64, text, signature []byte) error {
	if robot == "" {
		robot = "base"
	}
	if !ed25519.Verify(party(robot).key().Public().(ed25519.PublicKey), text, signature) {
		return errForged
	}
	return nil
}

// subjectOf is where an example is published.
func subjectOf(kind string) string {
	switch kind {
	case KindHeartbeat, KindTie, KindSummary:
		return UpSubject("site-3", "r1", kind)
	case KindLease:
		return LeaseSubject("site-3")
	case KindRule:
		return RuleSubject("site-3")
	}
	return DownSubject("site-3", "r1", kind)
}

func signerOf(subject string) party {
	if strings.HasPrefix(subject, "up.") {
		return "r1"
	}
	return "base"
}

// unsigned takes the signature of an example off.
func unsigned(t interface{ Fatal(...any) }, m *message) (kind string, body []byte) {
	b, err := m.value.Marshal()
	if err == nil {
		b, _, err = detach(b)
	}
	if err != nil {
		t.Fatal(err)
	}
	kinds := map[string]string{"heartbeat": KindHeartbeat, "correction": KindCorrection, "ruling": KindRule}
	kind, _, _ = strings.Cut(m.name, "-")
	if kinds[kind] != "" {
		kind = kinds[kind]
	}
	return kind, b
}

// Every message that is signed verifies where it was signed for, decodes with its signature, and is the same message otherwise.
func TestSignedMessages(t *testing.T) {
	kinds := map[string]bool{}
	for _, m := range examples() {
		kind, body := unsigned(t, &m)
		kinds[kind] = true
		subject := subjectOf(kind)
		signed, err := Sign(subject, body, signerOf(subject))
		if err != nil {
			t.Fatalf("%s: %v", m.name, err)
		}
		if err := Verify(subject, 0, signed, parties{}); err != nil {
			t.Errorf("%s: %v", m.name, err)
		}
		if !bytes.Equal(signed[:len(body)], body) || len(signed) != len(body)+signatureRoom {
			t.Errorf("%s: signing changed more than the end", m.name)
		}
		if err := Verify(subject, 0, body, parties{}); !errors.Is(err, ErrUnsigned) {
			t.Errorf("%s without a signature: %v", m.name, err)
		}
		x, err := m.decode(signed)
		if err != nil {
			t.Errorf("%s: %v", m.name, err)
			continue
		}
		back, err := x.(interface{ Marshal() ([]byte, error) }).Marshal()
		if err != nil || !bytes.Equal(back, signed) {
			t.Errorf("%s: the signature is lost in reading and writing, %v", m.name, err)
		}
		if _, err := Sign(subject, signed, signerOf(subject)); err == nil {
			t.Errorf("%s: signed twice", m.name)
		}
	}
	for _, kind := range []string{KindHeartbeat, KindTie, KindSummary, KindWant, KindCorrection, KindVerdict, KindLease, KindRule} {
		if !kinds[kind] {
			t.Errorf("no example of %s", kind)
		}
	}
}

// No bit of a message, and nothing of where it goes, can change without breaking the signature.
func TestSignatureCoversEverything(t *testing.T) {
	all := examples()
	rapid.Check(t, func(t *rapid.T) {
		m := &all[rapid.IntRange(0, len(all)-1).Draw(t, "message")]
		kind, body := unsigned(t, m)
		subject := subjectOf(kind)
		signed, err := Sign(subject, body, signerOf(subject))
		if err != nil {
			t.Fatal(err)
		}
		altered := bytes.Clone(signed)
		altered[rapid.IntRange(0, len(altered)-1).Draw(t, "byte")] ^= 1 << rapid.IntRange(0, 7).Draw(t, "bit")
		if Verify(subject, 0, altered, parties{}) == nil {
			t.Fatal("an altered message verifies")
		}
		extra := protowire.AppendVarint(protowire.AppendTag(nil, 99, protowire.VarintType), 1)
		for _, longer := range [][]byte{append(extra, signed...), append(bytes.Clone(signed), extra...), append(bytes.Clone(signed), signed[len(body):]...)} {
			if Verify(subject, 0, longer, parties{}) == nil {
				t.Fatal("a longer message verifies")
			}
		}
	})
	_, body := unsigned(t, &all[1])
	signed, err := Sign("up.site-3.r1.tie", body, party("r1"))
	if err != nil {
		t.Fatal(err)
	}
	for _, elsewhere := range []string{
		"up.site-3.r2.tie", "up.site-4.r1.tie", "up.site-3.r1.hb", "up.site-3.r1.summary", "up.site-3.r1.summary.head", "up.site-3.r1.summary.a.0",
		"down.site-3.r1.verdict", "down.site-3._lease", "up.site-3.r1.tie.x", "up",
	} {
		if Verify(elsewhere, 0, signed, parties{}) == nil {
			t.Errorf("a tie of r1 verifies on %s", elsewhere)
		}
	}
}

// The tag is the one that the library would write.
func TestSignatureTag(t *testing.T) {
	if tag := protowire.AppendVarint(protowire.AppendTag(nil, signatureField, protowire.BytesType), signatureSize); string(tag) != signatureTag {
		t.Errorf("%x, want %x", signatureTag, tag)
	}
}

// What is signed is written out here once, so that another program can check it.
func TestSignedText(t *testing.T) {
	const want = "\xff" + "selvage 1" + "\x00" + "up.f.r1.tie" + "\x00" + "body"
	if got := signedText("up.f.r1.tie", []byte("body")); string(got) != want {
		t.Errorf("%q, want %q", got, want)
	}
}

func TestDetachRefuses(t *testing.T) {
	field := func(num protowire.Number, n int) []byte {
		return protowire.AppendBytes(protowire.AppendTag(nil, num, protowire.BytesType), make([]byte, n))
	}
	for _, c := range []struct {
		want string
		b    []byte
	}{
		{"signature: found another field", field(100, 63)},
		{"signature: found another field", field(100, 65)},
		{"signature: found another field", append(field(100, 64), field(3, 1)...)},
		{"signature: found another field", append(field(100, 64), field(100, 64)...)},
		{"signature: found another field", protowire.AppendVarint(protowire.AppendTag(nil, 100, protowire.VarintType), 64)},
		{"message: found bytes that are no field", []byte{0x80}},
		{"message: found a field cut short", field(3, 9)[:5]},
	} {
		_, _, err := detach(c.b)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%x: error %v, want %s", c.b, err, c.want)
		}
		if Verify("up.f.r1.tie", 0, c.b, parties{}) == nil {
			t.Errorf("%x verifies", c.b)
		}
		if _, err := Sign("up.f.r1.tie", c.b, party("r1")); err == nil {
			t.Errorf("%x was signed", c.b)
		}
	}
	// A field whose content looks like a signature is none.
	inner := field(3, 0)
	inner = protowire.AppendBytes(protowire.AppendTag(nil, 3, protowire.BytesType), append(inner, field(100, 64)...))
	if _, signature, err := detach(inner); signature != nil || err != nil {
		t.Errorf("signature %x, error %v in %x", signature, err, inner)
	}
}

type broken struct{ n int }

func (b broken) Sign([]byte) ([]byte, error) {
	if b.n < 0 {
		return nil, errForged
	}
	return make([]byte, b.n), nil
}

func TestSignRefusesWhatASignerCannot(t *testing.T) {
	for _, n := range []int{-1, 0, 63, 65} {
		if b, err := Sign("up.f.r1.tie", []byte{8, 1}, broken{n}); err == nil {
			t.Errorf("signature of %d bytes: %x", n, b)
		}
	}
}

// A summary that is as large as can be still has room for its signature, whole and in chunks, and each chunk for its own.
func TestRoomForSignatures(t *testing.T) {
	large, err := Sign(UpSubject("f", "r1", KindSummary), protowire.AppendBytes(protowire.AppendTag(nil, 99, protowire.BytesType), make([]byte, MaxSummary-signatureRoom-6)), party("r1"))
	if err != nil {
		t.Fatal(err)
	}
	if len(large) != MaxSummary {
		t.Fatalf("%d bytes, want %d", len(large), MaxSummary)
	}
	chunks, head := split(t, large, 1, SlotA)
	var a Assembler
	var whole []byte
	for n, c := range append(chunks, head) {
		subject := HeadSubject("f", "r1")
		if n < len(chunks) {
			subject = ChunkSubject("f", "r1", SlotA, n)
		}
		b, err := Sign(subject, c, party("r1"))
		if err != nil {
			t.Fatal(err)
		}
		at, err := ParseSubject(subject)
		if err != nil {
			t.Fatal(err)
		}
		if err := Verify(subject, 0, b, parties{}); err != nil {
			t.Fatal(err)
		}
		if whole, err = a.Accept(at, b); err != nil {
			t.Fatal(err)
		}
	}
	if !bytes.Equal(whole, large) {
		t.Errorf("%d bytes came out of %d", len(whole), len(large))
	}
}

func FuzzVerify(f *testing.F) {
	for _, m := range examples() {
		b, err := m.value.Marshal()
		if err != nil {
			f.Fatal(err)
		}
		f.Add(b)
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		const subject = "up.site-3.r1.tie"
		body, signature, err := detach(b)
		if err == nil && signature != nil && !bytes.Equal(attach(body, signature), b) {
			t.Fatalf("%x and %x put together are not %x", body, signature, b)
		}
		if Verify(subject, 0, b, parties{}) == nil {
			t.Fatal("verifies")
		}
	})
}
