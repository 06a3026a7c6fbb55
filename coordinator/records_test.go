package coordinator

import (
	"math"
	"slices"
	"testing"

	"selvage/msgs"
)

// TestRecordsArriveOnce: whatever comes twice or out of order, each tie counts once, the gaps are asked for, and safe is what has
// come without a gap.
func TestRecordsArriveOnce(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	var ties []*msgs.Tie
	for i := range 7 {
		ties = append(ties, b.tie(x, i%4, y, (i+1)%4, 0))
	}
	for _, n := range []int{2, 5, 3, 5, 2} {
		b.hear("r1", msgs.KindTie, ties[n-1])
	}
	w := want(t, b.tick(1), "r1")
	if w.Safe != 0 || !slices.Equal(w.Gaps, [][2]uint64{{1, 1}, {4, 4}}) || w.Journal != journalName("r1") {
		t.Errorf("want %+v", w)
	}
	b.beat("r1", nil) // it has seven
	b.hear("r1", msgs.KindTie, ties[0])
	if w = want(t, b.tick(5), "r1"); w.Safe != 3 || !slices.Equal(w.Gaps, [][2]uint64{{4, 4}, {6, 7}}) {
		t.Errorf("want %+v", w)
	}
	for _, n := range []int{7, 6, 4} {
		b.hear("r1", msgs.KindTie, ties[n-1])
	}
	if w = want(t, b.tick(5), "r1"); w.Safe != 7 || len(w.Gaps) != 0 {
		t.Errorf("want %+v", w)
	}
	if n := len(b.Findings()); n != 7 {
		t.Errorf("%d ties", n)
	}
}

// TestSafeIsRepeated: a robot that sends again what is safe has not heard of it.
func TestSafeIsRepeated(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	tie := b.tie(x, 0, y, 0, 0)
	b.summarise(x)
	b.beat("r1", nil)
	b.hear("r1", msgs.KindTie, tie)
	want(t, b.tick(1), "r1")
	if n := len(of(b.tick(100), "r1", msgs.KindWant)); n != 0 {
		t.Errorf("%d wants without a cause", n)
	}
	b.hear("r1", msgs.KindTie, tie)
	if w := want(t, b.tick(100), "r1"); w.Safe != 1 {
		t.Errorf("safe %d", w.Safe)
	}
}

// TestNewJournal: a robot with an empty disk counts from one again; late records of the old journal still count, in their own
// numbers, and do not disturb those of the new one.
func TestNewJournal(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	old := []*msgs.Tie{b.tie(x, 0, y, 0, 0), b.tie(x, 1, y, 1, 0), b.tie(x, 2, y, 2, 0)}
	b.summarise(x)
	b.hear("r1", msgs.KindTie, old[0])
	b.hear("r1", msgs.KindTie, old[1])
	b.tick(1)
	fresh := []*msgs.Tie{b.tie(x, 3, y, 3, 0), b.tie(x, 3, y, 2, 0)}
	for i, m := range fresh {
		m.Header.Journal, m.Header.Number = msgs.JournalID{1}, uint64(i+1)
	}
	b.hear("r1", msgs.KindTie, fresh[0])
	b.hear("r1", msgs.KindTie, old[2])
	b.hear("r1", msgs.KindTie, old[0])
	b.hear("r1", msgs.KindTie, fresh[1])
	w := want(t, b.tick(30), "r1")
	if w.Journal != (msgs.JournalID{1}) || w.Safe != 2 || len(w.Gaps) != 0 || len(b.Findings()) != 5 {
		t.Errorf("want %+v, %d ties", w, len(b.Findings()))
	}
	other := newTrack("r1", 6, 3, 2, 3)
	s := &msgs.Summary{Header: header("r1", 0), Version: 1, Dim: 3, Parts: []msgs.Part{other.part(2, 1)}}
	s.Header.Journal = msgs.JournalID{1}
	b.hear("r1", msgs.KindSummary, s)
	b.summarise(x) // late, of the agent that is gone
	b.tick(31)
	if m := b.Map(); len(m) != 2 || m[0].Session != 1 || m[1].Session != 6 {
		t.Errorf("map %+v", m)
	}
	if v := b.robots["r1"].summary.Version; v != 1 {
		t.Errorf("summary %d", v)
	}
}

// TestLostStoreIsAnnounced: a base that knows nothing tells a robot that has heard of an older one so, until the robot says that it
// has understood, and asks for all its records.
func TestLostStoreIsAnnounced(t *testing.T) {
	b := newBase(t, 2, func(c *Config) { c.Incarnation = 5 })
	stale := func(h *msgs.Heartbeat) { h.HighestIncarnation, h.NewestNumber = 4, 3 }
	silent := func(h *msgs.Heartbeat) { h.HighestIncarnation = 4 }
	b.beat("r1", stale)
	b.beat("r2", silent)
	out := b.tick(1)
	if w := want(t, out, "r1"); w.Epoch.Incarnation != 5 || w.Safe != 0 || !slices.Equal(w.Gaps, [][2]uint64{{1, 3}}) {
		t.Errorf("want %+v", w)
	}
	if w := want(t, out, "r2"); w.Epoch.Incarnation != 5 || len(w.Gaps) != 0 {
		t.Errorf("want %+v", w)
	}
	if n := len(of(b.tick(100), "r2", msgs.KindWant)); n < 2 {
		t.Errorf("announced %d times more", n)
	}
	b.beat("r2", nil)
	if n := len(of(b.tick(400), "r2", msgs.KindWant)); n != 0 {
		t.Errorf("announced %d times to a robot that knows", n)
	}
}

// TestOddRecords: huge numbers, announced or sent, ask for no more than the window; names of others' ties are free.
func TestOddRecords(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	wild := b.tie(x, 0, y, 0, 0)
	for _, n := range []uint64{math.MaxUint64, window + 1} {
		wild.Header.Number = n
		if err := b.try("r1", msgs.KindTie, wild); err == nil {
			t.Errorf("record %d was taken", n)
		}
	}
	b.beat("r1", func(h *msgs.Heartbeat) { h.NewestNumber = math.MaxUint64 })
	if w := want(t, b.tick(1), "r1"); !slices.Equal(w.Gaps, [][2]uint64{{1, window}}) {
		t.Errorf("gaps %v", w.Gaps)
	}
	for _, k := range []*track{x, y} {
		m := b.tie(k, 0, map[*track]*track{x: y, y: x}[k], 1, 0)
		m.ID, m.Header.Number = "the-same", 1
		b.hear(k.robot, msgs.KindTie, m)
	}
	if f := b.Findings(); len(f) != 2 || f[0].From.Robot != "r1" || f[1].From.Robot != "r2" {
		t.Errorf("findings %+v", f)
	}
	for name, spoil := range map[string]func(h *msgs.Header){
		"fleet": func(h *msgs.Header) { h.Fleet = "other" },
		"robot": func(h *msgs.Header) { h.Robot = "r2" },
	} {
		m := b.tie(x, 1, y, 1, 0)
		spoil(&m.Header)
		if err := b.try("r1", msgs.KindTie, m); err == nil {
			t.Errorf("a tie of another %s was taken", name)
		}
	}
	spatial := newBase(t, 3, nil).tie(newTrack("r1", 1, 4, 3, 1), 0, newTrack("r2", 1, 4, 3, 1), 0, 0)
	if err := b.try("r1", msgs.KindTie, spatial); err == nil {
		t.Error("a tie in space was taken in a planar survey")
	}
	if len(b.Findings()) != 2 {
		t.Errorf("%d ties", len(b.Findings()))
	}
}

// TestTieWaitsForSeparators: a tie whose ends are not both in summaries is open and asks the robot that was seen, by id or by
// stamp, until its summary has the end.
func TestTieWaitsForSeparators(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	b.sees(x, 1, y, 2)
	stamped := b.tie(x, 2, y, 3, 0)
	stamped.To = msgs.KeyRef{Robot: "r2", Session: 1, ByStamp: true, StampNS: 777}
	b.hear("r1", msgs.KindTie, stamped)
	b.summarise(x)
	b.beat("r2", nil)
	out := b.tick(1)
	w := want(t, out, "r2")
	if len(w.Keys) != 2 || w.Keys[0] != stamped.To || w.Keys[1].ID != 20 {
		t.Errorf("keys %+v", w.Keys)
	}
	sameText(t, verdicts(t, out), "r1 r1-1 open", "r1 r1-2 open")
	if len(of(b.tick(100), "r2", msgs.KindWant)) < 2 || b.Settled() {
		t.Error("it does not go on asking")
	}
	b.version["r2"]++
	s := &msgs.Summary{Header: header("r2", 0), Version: 1, Dim: 3, Parts: []msgs.Part{y.part(2, 5)}}
	s.Parts[0].Junctions[3].Resolved = []int64{776, 777}
	b.hear("r2", msgs.KindSummary, s)
	out = b.tick(31)
	sameText(t, verdicts(t, out), "r1 r1-1 held", "r1 r1-2 held")
	if n := len(of(b.tick(400), "r2", msgs.KindWant)); n > 1 {
		t.Errorf("%d wants when nothing is missing", n)
	}
}
