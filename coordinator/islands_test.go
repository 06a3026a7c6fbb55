package coordinator

import (
	"strings"
	"testing"

	"selvage/internal/lie"
	"selvage/msgs"
)

// apart is the largest component of the twist between two poses.
func apart(x, y lie.SE3) (worst float64) {
	d := x.Between(y)
	for _, v := range d.Log() {
		worst = max(worst, v, -v)
	}
	return worst
}

// placed returns a unit of the map.
func placed(t testing.TB, b *base, robot string) Placed {
	t.Helper()
	for _, p := range b.Map() {
		if p.Robot == robot {
			return p
		}
	}
	t.Fatalf("%s is not on the map", robot)
	return Placed{}
}

// TestOlderDatumStays: r3 and r4 are the first island, r1 and r2 the second; when they merge the datum of the first stays, and its
// junction keeps its pose to the bit through everything that comes.
func TestOlderDatumStays(t *testing.T) {
	b := newBase(t, 3, nil)
	var k []*track
	for i, robot := range []string{"r1", "r2", "r3", "r4"} {
		k = append(k, newTrack(robot, 1, 4, 3, uint64(i)))
		b.summarise(k[i])
	}
	b.sees(k[2], 1, k[3], 1)
	b.tick(31)
	first := placed(t, b, "r3")
	if first.Island != "r3.1.0" || placed(t, b, "r4").Island != first.Island || placed(t, b, "r1").Joined {
		t.Fatalf("map %+v", b.Map())
	}
	b.sees(k[0], 2, k[1], 1)
	b.tick(31)
	if m := placed(t, b, "r1"); m.Island != "r1.1.0" || placed(t, b, "r2").Island != m.Island || placed(t, b, "r4").Island != "r3.1.0" {
		t.Fatalf("map %+v", b.Map())
	}
	b.sees(k[1], 3, k[2], 0)
	out := b.tick(31)
	for _, robot := range []string{"r1", "r2", "r3", "r4"} {
		if p := placed(t, b, robot); p.Island != "r3.1.0" {
			t.Errorf("%s is in %q", robot, p.Island)
		}
		if c := correction(t, out, robot); c.Parts[0].Island != "r3.1.0" || c.Epoch != b.Epoch() {
			t.Errorf("correction for %s: %q, epoch %v of %v", robot, c.Parts[0].Island, c.Epoch, b.Epoch())
		}
	}
	for range 3 {
		b.sees(k[0], 1, k[2], 2)
		b.summarise(k[2])
		b.summarise(k[0])
		b.tick(31)
		if p := placed(t, b, "r3"); p.Poses[0] != first.Poses[0] || p.Island != first.Island {
			t.Errorf("the datum's junction moved by %g", apart(p.Poses[0], first.Poses[0]))
		}
	}
}

// TestDatumSurvivesItsJunction: when the junction that carries the datum leaves the summary, the map stays where it was.
func TestDatumSurvivesItsJunction(t *testing.T) {
	b := newBase(t, 3, nil)
	x, y := newTrack("r1", 1, 4, 3, 1), newTrack("r2", 1, 4, 3, 2)
	p := x.part(3, 1)
	clear(p.Cliques[0].B) // nothing pulls at the junction that goes
	b.hear("r1", msgs.KindSummary, &msgs.Summary{Header: header("r1", 0), Version: 1, Dim: 6, Parts: []msgs.Part{p}})
	b.summarise(y)
	b.sees(x, 2, y, 1)
	b.sees(x, 3, y, 3)
	b.tick(31)
	for range 2 {
		b.beat("r1", func(h *msgs.Heartbeat) { h.SummaryVersion = 1 })
		b.beat("r2", nil)
		b.tick(31)
	}
	before := placed(t, b, "r2")
	p.Junctions = p.Junctions[1:]
	p.Cliques = p.Cliques[1:]
	for i := range p.Cliques {
		p.Cliques[i].Nodes = []int{i, i + 1}
	}
	b.hear("r1", msgs.KindSummary, &msgs.Summary{Header: header("r1", 0), Version: 2, Dim: 6, Parts: []msgs.Part{p}})
	b.tick(31)
	after := placed(t, b, "r2")
	if after.Island != "r1.1.10" {
		t.Errorf("island %q", after.Island)
	}
	for i := range after.Poses { // the shortened summary says the same
		if off := apart(before.Poses[i], after.Poses[i]); off > 1e-6 {
			t.Errorf("junction %d moved by %g", i, off)
		}
	}
}

// TestApart: a robot that nothing connects gets corrections that say so, and is no part of the datum.
func TestApart(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y, z := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2), newTrack("r3", 1, 4, 2, 3)
	for _, k := range []*track{x, y, z} {
		b.summarise(k)
	}
	b.sees(x, 2, y, 1)
	out := b.tick(1)
	c := correction(t, out, "r3")
	if len(c.Parts) != 1 || c.Parts[0].Joined || len(c.Parts[0].IDs) != 0 || c.Epoch != b.Epoch() {
		t.Errorf("correction %+v", c)
	}
	if p := placed(t, b, "r3"); p.Joined || p.Island != "" {
		t.Errorf("placed %+v", p)
	}
}

// TestVerdictsOnChange: a verdict is told when it is new or turns, and then once.
func TestVerdictsOnChange(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	b.summarise(x)
	b.sees(x, 2, y, 1)
	sameText(t, verdicts(t, b.tick(31)), "r1 r1-1 open")
	b.sees(y, 2, x, 1)
	sameText(t, verdicts(t, b.tick(31)), "r2 r2-1 open")
	b.summarise(y)
	sameText(t, verdicts(t, b.tick(31)), "r1 r1-1 held", "r2 r2-1 held")
	b.summarise(y)
	b.summarise(x)
	sameText(t, verdicts(t, b.tick(31)))
	if f := b.Findings()[0]; f.SinceNS != 63*second || f.Reason != "taken as true on request" { // solutions at 1, 32 and 63 s
		t.Errorf("finding %+v", f)
	}
}

// TestFalseTieIsRefused: three robots with ties in many places; one tie 20 m off is refused, with its statistic.
func TestFalseTieIsRefused(t *testing.T) {
	b := newBase(t, 3, func(c *Config) { c.HoldAll = false })
	var k []*track
	for i, robot := range []string{"r1", "r2", "r3"} {
		k = append(k, newTrack(robot, 1, 30, 3, uint64(i)))
		b.summarise(k[i])
	}
	for i := 0; i < 30; i += 3 {
		b.sees(k[0], i, k[1], 29-i)
		b.sees(k[1], i+1, k[2], i)
		b.sees(k[2], i+2, k[0], i+1)
	}
	b.hear("r1", msgs.KindTie, b.tie(k[0], 7, k[1], 5, 20))
	out := b.tick(31)
	held := 0
	for _, f := range b.Findings() {
		if f.Tie != "r1-11" {
			if f.Verdict == msgs.Held {
				held++
			}
			continue
		}
		if f.Verdict != msgs.Refused || !(f.Statistic > 16.812) || f.DoF != 6 || !strings.Contains(f.Reason, "contradict") {
			t.Errorf("finding %+v", f)
		}
	}
	if held < 29 { // of thirty, one may stand out by chance at 0.99
		t.Errorf("%d of thirty true ties are held", held)
	}
	told := 0
	for _, v := range verdicts(t, out) {
		if v == "r1 r1-11 refused" {
			told++
		}
	}
	if told != 1 {
		t.Errorf("told %d times", told)
	}
}

// TestResend: a correction that the heartbeat does not answer is sent again after 10, 20, 40 s, at once when the robot repeats its
// summary, and not after the answer.
func TestResend(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	b.summarise(x)
	b.summarise(y)
	b.sees(x, 2, y, 1)
	b.tick(1)
	b.beat("r2", nil)
	at := map[string][]int64{}
	note := func(out []Publish) {
		for _, p := range out {
			if p.Kind == msgs.KindCorrection {
				at[p.Robot] = append(at[p.Robot], b.now/second)
			}
		}
	}
	for b.now < 80*second {
		note(b.tick(1))
	}
	if got := at["r1"]; len(got) != 3 || got[0] != 11 || got[1] != 31 || got[2] != 71 {
		t.Errorf("again to r1 at %v", got)
	}
	if len(at["r2"]) != 0 {
		t.Errorf("again to r2 at %v", at["r2"])
	}
	epoch := b.Epoch()
	b.version["r1"]--
	b.summarise(x) // the same version again
	for b.now < 92*second {
		note(b.tick(1))
	}
	if got := at["r1"]; len(got) != 3 && len(got) != 4 || b.Epoch() != epoch {
		t.Errorf("after the summary came again: %v, epoch %v", got, b.Epoch())
	}
	b.beat("r1", nil)
	n := len(at["r1"])
	for b.now < 1000*second {
		note(b.tick(10))
	}
	if len(at["r1"]) != n && b.Epoch() == epoch {
		t.Errorf("after the answer again at %v", at["r1"])
	}
}

// TestOldSummaries: an older or repeated version changes nothing.
func TestOldSummaries(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	b.version["r1"] = 5
	b.summarise(x)
	b.summarise(y)
	b.sees(x, 2, y, 1)
	b.tick(1)
	before := placed(t, b, "r2")
	revision := b.revision
	for _, v := range []uint64{4, 3} { // version 5, then 4
		b.version["r1"] = v
		b.summarise(x)
	}
	b.hear("r1", msgs.KindSummary, &msgs.Summary{Header: header("r1", 0), Version: 6, Unchanged: true, Dim: 3})
	b.version["r1"] = 6
	b.tick(40)
	if b.revision != revision || placed(t, b, "r2").Poses[1] != before.Poses[1] {
		t.Error("an old summary counted")
	}
}
