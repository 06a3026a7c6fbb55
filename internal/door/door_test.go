package door

import (
	"errors"
	"fmt"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"selvage/internal/keys"
	"selvage/msgs"
)

func pair(t *testing.T) *keys.Pair {
	t.Helper()
	path := filepath.Join(t.TempDir(), "seed")
	_, err := keys.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	p, err := keys.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

func beat(t *testing.T) []byte {
	t.Helper()
	b, err := (&msgs.Heartbeat{Header: msgs.Header{Fleet: "f", Robot: "r1"}}).Marshal()
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func sign(t *testing.T, subject string, body []byte, p *keys.Pair) []byte {
	t.Helper()
	b, err := msgs.Sign(subject, body, p)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func TestDoor(t *testing.T) {
	base, r1, r2 := pair(t), pair(t), pair(t)
	ring, err := keys.NewRing(base.Public(), []keys.Robot{{Name: "r1", Public: r1.Public()}, {Name: "r2", Public: r2.Public(), RevokedNS: 50}})
	if err != nil {
		t.Fatal(err)
	}
	var told []string
	d := New("f", []string{"r1", "r2", "r3"}, ring, func(err error) { told = append(told, err.Error()) })
	body := beat(t)
	const hb = "up.f.r1.hb"
	if !d.Admit(0, hb, 0, sign(t, hb, body, r1)) || !d.Admit(0, "down.f._lease", 0, sign(t, "down.f._lease", body, base)) || !d.Admit(0, "rule.f", 0, sign(t, "rule.f", body, base)) ||
		!d.Admit(0, "up.f.r2.hb", 49, sign(t, "up.f.r2.hb", body, r2)) {
		t.Fatal("kept out:", told)
	}
	for _, c := range []struct {
		subject string
		payload []byte
	}{
		{hb, body}, {hb, sign(t, hb, body, r2)}, {hb, sign(t, "up.f.r1.tie", body, r1)}, {hb, []byte{0x80}},
		{"up.f.r2.hb", sign(t, "up.f.r2.hb", body, r2)}, {"up.f.r3.hb", sign(t, "up.f.r3.hb", body, r1)},
		{"up.f.r9.hb", body}, {"up.f.r8.tie", body}, {"up.g.r1.hb", sign(t, "up.g.r1.hb", body, r1)}, {"nonsense", nil},
		{"up.f.r1.summary.c.0", body}, {"rule.f", sign(t, "rule.f", body, r1)}, {"rule.g", body}, {"down.f._lease", body}, {"down.f.r1.corr", sign(t, "down.f.r1.corr", body, r1)},
	} {
		if d.Admit(100, c.subject, 100, c.payload) {
			t.Errorf("%s: %x came in", c.subject, c.payload)
		}
	}
	want := []Count{
		{Base, "corr", Forged, 1}, {Base, msgs.KindLease, Unsigned, 1}, {Base, "rule", Forged, 1},
		{Others, "", Foreign, 3}, {Others, "hb", Unknown, 1}, {Others, "tie", Unknown, 1},
		{"r1", "", Foreign, 1}, {"r1", "hb", Forged, 2}, {"r1", "hb", Malformed, 1}, {"r1", "hb", Unsigned, 1},
		{"r2", "hb", Revoked, 1}, {"r3", "hb", Unknown, 1},
	}
	if diff := cmp.Diff(want, d.Counts()); diff != "" {
		t.Errorf("counts (-want +got):\n%s", diff)
	}
	if want := []string{"up.f.r1.hb: no sig", "up.f.r2.hb: the key was", "up.f.r3.hb: nobody", "up.f.r9.hb: a robot", "rule.f: the sig"}; !begin(told, want) {
		t.Errorf("told %q, want %q", told, want)
	}
}

func begin(got, want []string) bool {
	ok := len(got) == len(want)
	for i := range want {
		ok = ok && strings.HasPrefix(got[i], want[i])
	}
	return ok
}

// Of one sender's messages that do not verify one is told each minute; of what comes in and is refused, one of each kind and reason.
func TestWarningsAreRare(t *testing.T) {
	var told []string
	base := pair(t)
	ring, err := keys.NewRing(base.Public(), nil)
	if err != nil {
		t.Fatal(err)
	}
	d := New("f", []string{"r1", "r2"}, ring, func(err error) { told = append(told, err.Error()) })
	const minute = 60e9
	for s := range int64(150) {
		d.Admit(s*1e9, "up.f.r1.hb", 0, nil)
		d.Admit(s*1e9, "up.f.r1.tie", 0, nil)
	}
	want := []string{"up.f.r1.hb: no signature", "up.f.r1.hb: no signature (and 119 more", "up.f.r1.hb: no signature (and 119 more"}
	if !begin(told, want) {
		t.Errorf("told %q, want %q", told, want)
	}
	told = nil
	for range 3 {
		d.Refuse(3*minute, "up.f.r1.hb", errors.New("a"))
		d.Refuse(3*minute, "up.f.r1.tie", errors.New("a"))
		d.Refuse(3*minute, "up.f.r2.tie", errors.New("a"))
		d.Refuse(3*minute, "up.f.r2.tie", fmt.Errorf("in it: %w", &msgs.FieldError{}))
		d.Refuse(3*minute, "up.f.r2.tie", &msgs.VersionError{})
	}
	if len(told) != 5 {
		t.Errorf("told %q, want 5", told)
	}
	got := d.Counts()
	wantCounts := []Count{
		{"r1", "hb", Unsigned, 150}, {"r1", "hb", Unwanted, 3}, {"r1", "tie", Unsigned, 150}, {"r1", "tie", Unwanted, 3},
		{"r2", "tie", Malformed, 3}, {"r2", "tie", Newer, 3}, {"r2", "tie", Unwanted, 3},
	}
	if diff := cmp.Diff(wantCounts, got); diff != "" {
		t.Errorf("counts (-want +got):\n%s", diff)
	}
}

// What strangers can make it remember is bounded.
func TestStrangersAreForgotten(t *testing.T) {
	told := 0
	d := New("f", []string{"r1"}, nil, func(error) { told++ })
	for i := range 10000 {
		d.Admit(0, fmt.Sprintf("up.f.x%d.hb", i), 0, nil)
		d.Admit(0, fmt.Sprintf("up.g%d.r1.hb", i), 0, nil)
		d.Admit(0, fmt.Sprintf("up.f.r1.k%d", i), 0, nil)
	}
	if n := len(d.Counts()) + len(d.told); told != 2 || n != 5 {
		t.Errorf("told %d times, %d entries", told, n)
	}
	if !d.Admit(0, "up.f.r1.hb", 0, nil) || !d.Admit(0, "down.f.r1.want", 0, nil) {
		t.Error("a fleet that does not sign keeps its own out")
	}
}
