package agent

import (
	"slices"
	"strings"
	"testing"

	"selvage/internal/lie"
	"selvage/msgs"
)

// TestWant: what the base asks for becomes part of the next summary, by id or by the exact stamp; what the robot does not know, or
// was meant for somebody else, is left alone.
func TestWant(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 12, 1)
	key := func(id int64) msgs.KeyRef { return msgs.KeyRef{Robot: "r1", Session: 1, ID: id} }
	stamp := func(ns int64) msgs.KeyRef { return msgs.KeyRef{Robot: "r1", Session: 1, ByStamp: true, StampNS: ns} }
	r.want(func(w *msgs.Want) {
		w.Keys = []msgs.KeyRef{key(3), key(99), stamp(8), stamp(-5), {Robot: "r1", Session: 9, ID: 1}, {Robot: "r1", Session: 9, ByStamp: true, StampNS: 8}}
	})
	p := summary(t, r.tick(1)).Parts
	if len(p) != 1 || !equal(ids(&p[0]), []int64{3, 8}) || !slices.Equal(p[0].Junctions[1].Resolved, []int64{8}) || len(r.Tracks()) != 1 {
		t.Fatalf("parts %+v, tracks %v", p, r.Tracks())
	}
	for name, spoil := range map[string]func(w *msgs.Want){
		"robot": func(w *msgs.Want) { w.Robot, w.Keys = "r2", nil },
		"fleet": func(w *msgs.Want) { w.Fleet = "other" },
		"term":  func(w *msgs.Want) { w.Term = 0 },
	} {
		w := &msgs.Want{Fleet: "fleet", Robot: "r1", Term: 1, Keys: []msgs.KeyRef{key(5)}}
		spoil(w)
		if _, err := r.hear(msgs.KindWant, w); err == nil {
			t.Errorf("a want of another %s was taken", name)
		}
	}
	r.want(func(w *msgs.Want) { w.Keys = []msgs.KeyRef{key(99)} })
	for _, s := range kinds(r.tick(60), msgs.KindSummary) {
		t.Errorf("summary %d for a keyframe that does not exist", s.Number)
	}
	r.walk(1, 99, 1, 1)
	r.want(func(w *msgs.Want) { w.Keys = []msgs.KeyRef{key(99)} })
	if p := summary(t, r.tick(20)).Parts; !equal(ids(&p[0]), []int64{3, 8, 99}) {
		t.Errorf("junctions %v once the keyframe is there", ids(&p[0]))
	}
}

// TestSafeAndGaps: records are repeated when the base misses them, not while one is under way, and not what is safe.
func TestSafeAndGaps(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 12, 1)
	for id := int64(1); id <= 5; id++ {
		r.see(1, id)
	}
	numbers := func(out []Publish) (n []uint64) {
		for _, p := range kinds(out, msgs.KindTie) {
			n = append(n, p.Number)
		}
		return n
	}
	gaps := func(w *msgs.Want) { w.Safe, w.Gaps = 2, [][2]uint64{{3, 3}, {5, 1 << 60}} }
	if n := numbers(r.want(gaps)); n != nil {
		t.Errorf("%v repeated at once", n)
	}
	r.now += 6 * second
	if n := numbers(r.want(func(w *msgs.Want) { gaps(w); w.Journal = msgs.JournalID{1} })); n != nil {
		t.Errorf("%v repeated for another journal", n)
	}
	if n := numbers(r.want(gaps)); !slices.Equal(n, []uint64{3, 5}) {
		t.Errorf("%v repeated, want 3 and 5", n)
	}
	r.now += 6 * second
	r.want(func(w *msgs.Want) { w.Safe = 4 })
	if n := numbers(r.want(gaps)); !slices.Equal(n, []uint64{5}) {
		t.Errorf("%v repeated after 4 was safe, want 5", n)
	}
	if r.want(func(w *msgs.Want) { w.Safe = 1 << 40 }); r.safe != 5 {
		t.Errorf("%d is safe of five", r.safe)
	}
}

// TestLostStore: when a base of a higher incarnation speaks, nothing is safe and the summary is new to it; what the old one says
// later does not count.
func TestLostStore(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 12, 1)
	r.see(1, 1)
	r.see(1, 2)
	r.tick(1)
	r.want(func(w *msgs.Want) { w.Safe = 2 })
	if _, err := r.hear(msgs.KindCorrection, bent(r.Agent, 1, 4)); err != nil {
		t.Fatal(err)
	}
	r.tick(30)
	if !r.Settled() {
		t.Fatal("not settled")
	}
	again := func(w *msgs.Want) { w.Epoch.Incarnation, w.Gaps = 2, [][2]uint64{{1, 2}} }
	if out := r.want(again); len(out) != 2 || r.Settled() {
		t.Errorf("%d ties, settled %v", len(out), r.Settled())
	}
	r.want(func(w *msgs.Want) { w.Safe = 2 })
	if r.safe != 0 {
		t.Errorf("%d is safe by the word of a base whose store is gone", r.safe)
	}
	out := r.tick(1)
	if s := summary(t, out); s.Version < 2 || s.Answers != (msgs.Epoch{Incarnation: 1, Number: 4}) {
		t.Errorf("summary %d answers %v", s.Version, s.Answers)
	}
	h, err := msgs.DecodeHeartbeat(kinds(out, msgs.KindHeartbeat)[0].Payload)
	if err != nil || h.HighestIncarnation != 2 {
		t.Errorf("heartbeat %+v, %v", h, err)
	}
}

// TestDue: the first summary goes at once, later ones when the traffic allows it or the robot has settled, and not too often.
func TestDue(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 12, 1)
	if n := len(kinds(r.tick(30), msgs.KindSummary)); n != 0 {
		t.Fatalf("%d summaries without a separator", n)
	}
	r.see(1, 3)
	first := summary(t, r.tick(1))
	if !equal(ids(&first.Parts[0]), []int64{3}) || first.Parts[0].Keyframes != 12 {
		t.Fatalf("first summary %+v", first.Parts[0])
	}
	size := len(r.payload)
	begin, raw := r.now, r.Raw()
	id := int64(12)
	for len(kinds(r.tick(1), msgs.KindSummary)) == 0 { // a keyframe and two measurements a second
		r.do(Keyframe{Session: 1, ID: id, StampNS: r.now, Pose: lie.Exp(lie.Tangent{float64(id)})})
		r.do(Relative{Session: 1, From: id - 1, To: id, Z: lie.Exp(lie.Tangent{1}), Info: sigmas(0.1, 0.1)})
		id++
		if r.now > begin+60*second {
			t.Fatal("no summary for a minute")
		}
	}
	waited, grown := r.now-begin, r.Raw()-raw
	if waited < r.cfg.PublishNS || float64(size) > r.cfg.TrafficShare*float64(grown) {
		t.Errorf("after %d s and %d bytes of measurements, the last summary had %d", waited/second, grown, size)
	}
	r.do(Keyframe{Session: 1, ID: id, StampNS: r.now, Pose: lie.Exp(lie.Tangent{float64(id)})})
	r.do(Relative{Session: 1, From: id - 1, To: id, Z: lie.Exp(lie.Tangent{1}), Info: sigmas(0.1, 0.1)})
	last := r.now
	for len(kinds(r.tick(1), msgs.KindSummary)) == 0 && r.now < last+60*second {
	}
	if waited := r.now - last; waited != r.cfg.SettleNS {
		t.Errorf("settled after %d s", waited/second)
	}
	last = r.now
	r.want(func(w *msgs.Want) { w.Keys = []msgs.KeyRef{{Robot: "r1", Session: 1, ID: 9}} })
	for len(kinds(r.tick(1), msgs.KindSummary)) == 0 && r.now < last+60*second {
	}
	if waited := r.now - last; waited != r.cfg.PublishNS {
		t.Errorf("wanted separators came after %d s", waited/second)
	}
}

// TestSummaryRepeats: until a correction used it, after 90, 180, 360 s; then never again.
func TestSummaryRepeats(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 12, 1)
	r.see(1, 3)
	first := r.tick(1)
	begin := r.now
	var at []int64
	for r.now < begin+700*second {
		if again := kinds(r.tick(1), msgs.KindSummary); len(again) > 0 {
			samePublished(t, again, kinds(first, msgs.KindSummary))
			at = append(at, (r.now-begin)/second)
		}
	}
	if !equal(at, []int64{90, 270, 630}) {
		t.Errorf("repeated after %v s", at)
	}
	c := bent(r.Agent, 0, 1)
	if _, err := r.hear(msgs.KindCorrection, c); err != nil || r.answered {
		t.Errorf("a correction of an older summary answers it (%v)", err)
	}
	c = bent(r.Agent, 1, 2)
	c.Parts = nil
	if _, err := r.hear(msgs.KindCorrection, c); err != nil {
		t.Fatal(err)
	}
	if n := len(kinds(r.tick(3000), msgs.KindSummary)); n != 0 {
		t.Errorf("%d summaries after it was answered", n)
	}
}

// TestSummaryIsWhole: all sessions with separators, sessions and ids ascending whatever the order they came in, with the metres
// travelled.
func TestSummaryIsWhole(t *testing.T) {
	r := newRobot(t, 2)
	for k, id := range []int64{50, -2, 40, 7} {
		r.do(Keyframe{Session: 8, ID: id, StampNS: id, Pose: lie.Exp(lie.Tangent{2 * float64(k)})})
		if k > 0 {
			r.do(Relative{Session: 8, From: []int64{50, -2, 40}[k-1], To: id, Z: lie.Exp(lie.Tangent{2}), Info: sigmas(0.1, 0.1)})
		}
	}
	r.see(8, 7)
	r.see(8, 50)
	r.tick(1)
	r.walk(3, 0, 25, 1)
	r.walk(5, 0, 25, 1) // no separator
	r.see(3, 4)
	s := summary(t, r.tick(30))
	if s.Version != 2 || s.Unchanged || len(s.Parts) != 2 || s.Parts[0].Session != 3 || s.Parts[1].Session != 8 {
		t.Fatalf("summary %+v", s)
	}
	p := &s.Parts[1]
	if !equal(ids(p), []int64{7, 50}) || p.Junctions[0].TravelM != 6 || p.Junctions[1].TravelM != 0 || p.Keyframes != 4 || len(p.Cliques) != 1 {
		t.Errorf("part %+v", p)
	}
}

// TestOneBadSessionHoldsNothingUp: measurements that leave a keyframe free are named; the other session is told, heartbeats go on,
// and what was told of the bad one before is told again.
func TestOneBadSessionHoldsNothingUp(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 12, 1)
	r.walk(2, 0, 12, 2)
	r.see(1, 3)
	r.see(2, 3)
	r.see(2, 8)
	before := summary(t, r.tick(1))
	blind := [36]float64{7: 1}
	r.do(Keyframe{Session: 2, ID: 12, Pose: lie.Identity()})
	r.do(Relative{Session: 2, From: 11, To: 12, Z: lie.Identity(), Info: blind})
	r.see(2, 12)
	r.see(1, 9)
	var out []Publish
	var errs []string
	for range 60 {
		r.now += second
		o, err := r.Handle(r.now, Tick{})
		out = append(out, o...)
		if err != nil {
			errs = append(errs, err.Error())
		}
	}
	if len(errs) == 0 || len(errs) > 8 || !strings.Contains(errs[0], "session 2") {
		t.Errorf("errors %q", errs)
	}
	if n := len(kinds(out, msgs.KindHeartbeat)); n < 3 {
		t.Errorf("%d heartbeats in a minute", n)
	}
	of := kinds(out, msgs.KindSummary)
	if len(of) == 0 {
		t.Fatal("no summary")
	}
	s, err := msgs.DecodeSummary(of[0].Payload)
	if err != nil {
		t.Fatal(err)
	}
	if len(s.Parts) != 2 || !equal(ids(&s.Parts[0]), []int64{3, 9}) || !equal(ids(&s.Parts[1]), ids(&before.Parts[1])) {
		t.Errorf("parts %+v", s.Parts)
	}
}
