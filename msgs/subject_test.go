package msgs

import (
	"strings"
	"testing"
)

var subjects = []string{
	UpSubject("f", "r-1", KindHeartbeat), UpSubject("f", "r-1", KindTie), UpSubject("f", "r-1", KindSummary),
	ChunkSubject("f", "r_1", SlotB, 127), HeadSubject("f", "r_1"), DownSubject("f", "r", KindWant), DownSubject("f", "r", KindCorrection),
	DownSubject("f", "r", KindVerdict), LeaseSubject("f"), RuleSubject("f"),
}

// rebuild makes a subject from its parts.
func rebuild(s Subject) string {
	switch {
	case s.Kind == KindLease:
		return LeaseSubject(s.Fleet)
	case s.Kind == KindRule:
		return RuleSubject(s.Fleet)
	case s.Head:
		return HeadSubject(s.Fleet, s.Robot)
	case s.Slot != "":
		return ChunkSubject(s.Fleet, s.Robot, s.Slot, s.Chunk)
	case s.Up:
		return UpSubject(s.Fleet, s.Robot, s.Kind)
	}
	return DownSubject(s.Fleet, s.Robot, s.Kind)
}

func TestSubjectsComeBack(t *testing.T) {
	want := "up.f.r-1.hb up.f.r-1.tie up.f.r-1.summary up.f.r_1.summary.b.127 up.f.r_1.summary.head down.f.r.want down.f.r.corr down.f.r.verdict down.f._lease rule.f"
	if got := strings.Join(subjects, " "); got != want {
		t.Errorf("subjects are\n%s\nwant\n%s", got, want)
	}
	for _, s := range subjects {
		sub, err := ParseSubject(s)
		if err != nil {
			t.Error(err)
			continue
		}
		if got := rebuild(sub); got != s {
			t.Errorf("%s became %s", s, got)
		}
	}
}

func TestSubjectsRefused(t *testing.T) {
	for _, s := range []string{
		"", "up", "up.f", "up.f.r", "up.f._lease", "down.f.r", "down.f._lease.x", "rule", "rule.", "rule._f", "rule.f.r", "up.f.r.rule", "down.f.r.rule", "sideways.f.r.tie", "up.f.r.want", "down.f.r.tie", "up.f.r.map", "up..r.tie",
		"up.f.*.tie", "up.f.>", "up.f._r.tie", "up.f.r.tie.a.0", "up.f.r.summary.", "up.f.r.summary.c.0", "up.f.r.summary.a", "up.f.r.summary.a.128",
		"up.f.r.summary.a.-1", "up.f.r.summary.a.01", "up.f.r.summary.a.1.1", "up.f.r.summary.head.1", "up.f.r.hb " + strings.Repeat("x", 1000),
	} {
		sub, err := ParseSubject(s)
		wantError(t, s, err, "subject: ")
		if sub != (Subject{}) {
			t.Errorf("%q: refused, but half taken apart: %+v", s, sub)
		}
		if err != nil && len(err.Error()) > 300 {
			t.Errorf("error of %d bytes", len(err.Error()))
		}
	}
}
