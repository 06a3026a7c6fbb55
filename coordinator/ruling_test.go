package coordinator

import (
	"strings"
	"testing"

	"selvage/msgs"
)

// judging leaves the ties to the evidence.
func judging(c *Config) { c.HoldAll = false }

// rule has a person rule on one tie.
func (b *base) rule(robot, id string, v msgs.VerdictKind, note string) {
	b.t.Helper()
	b.hear("", msgs.KindRule, &msgs.Ruling{Fleet: "fleet", Target: msgs.OnTie, Robot: robot, Tie: id, Verdict: v, By: "lead", Note: note})
}

// threeRobots lets three robots meet in thirty places, with a tie of r1 at the end, number 11, that is off sideways.
func threeRobots(b *base, off float64) {
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
	b.hear("r1", msgs.KindTie, b.tie(k[0], 7, k[1], 5, off))
}

func finding(t *testing.T, b *base, robot, tie string) Finding {
	t.Helper()
	for _, f := range b.Findings() {
		if f.From.Robot == robot && f.Tie == tie {
			return f
		}
	}
	t.Fatalf("no finding on %s", tie)
	return Finding{}
}

// A false tie that a person holds is true for the fleet: what contradicts it gives way, and what that costs is told.
func TestRuledHeld(t *testing.T) {
	free, held := newBase(t, 3, judging), newBase(t, 3, judging)
	held.rule("r1", "r1-11", msgs.Held, "seen twice")
	threeRobots(free, 40)
	threeRobots(held, 40)
	free.tick(31)
	held.tick(31)
	if f := finding(t, free, "r1", "r1-11"); f.Verdict != msgs.Refused {
		t.Fatalf("left to the evidence: %+v", f)
	}
	f := finding(t, held, "r1", "r1-11")
	if f.Verdict != msgs.Held || !strings.HasPrefix(f.Reason, "ruled held by lead: seen twice; misclosure ") ||
		!strings.Contains(f.Reason, "; the evidence alone: refused, contradicted by the ties held: misclosure ") ||
		!strings.Contains(f.Reason, "; ties held by the evidence alone that contradict this solution: ") || !(f.Statistic > f.Limit) || f.DoF != 6 {
		t.Errorf("finding %+v", f)
	}
	held.now += 100 * second
	held.summarise(newTrack("r1", 1, 30, 3, 0)) // another solution, the same verdict
	held.tick(31)
	if again := finding(t, held, "r1", "r1-11"); again.SinceNS != f.SinceNS || again.Verdict != msgs.Held {
		t.Errorf("held since %d, before since %d", again.SinceNS, f.SinceNS)
	}
	worst := 0.0
	for _, robot := range []string{"r2", "r3"} {
		x, y := placed(t, free, robot), placed(t, held, robot)
		for k := range x.Poses {
			worst = max(worst, apart(x.Poses[k], y.Poses[k]))
		}
	}
	if worst < 0.01 {
		t.Errorf("the map moves by %g m only: the tie is not in it", worst)
	}
}

// A true tie that a person refuses takes no part: the map is that without it, and it is told that it agrees with it.
func TestRuledRefused(t *testing.T) {
	for _, holdAll := range []bool{false, true} {
		refused := newBase(t, 3, func(c *Config) { c.HoldAll = holdAll })
		refused.rule("r1", "r1-11", msgs.Refused, "behind glass")
		threeRobots(refused, 0.2)
		refused.tick(31)
		f := finding(t, refused, "r1", "r1-11")
		if f.Verdict != msgs.Refused || !strings.HasPrefix(f.Reason, "ruled refused by lead: behind glass; it agrees with the joint solution: misclosure ") || !(f.Statistic < f.Limit) || f.Statistic == 0 {
			t.Errorf("hold all %v: finding %+v", holdAll, f)
		}
		other := newBase(t, 3, func(c *Config) { c.HoldAll = holdAll })
		other.rule("r1", "r1-11", msgs.Refused, "behind glass")
		threeRobots(other, 20)
		other.tick(31)
		if f := finding(t, other, "r1", "r1-11"); f.Verdict != msgs.Refused || !strings.Contains(f.Reason, "; it contradicts the joint solution: ") {
			t.Errorf("hold all %v: finding %+v", holdAll, f)
		}
		for _, robot := range []string{"r2", "r3"} {
			x, y := placed(t, refused, robot), placed(t, other, robot)
			for k := range x.Poses {
				if e := apart(x.Poses[k], y.Poses[k]); e > 1e-6 {
					t.Fatalf("hold all %v: the refused tie moves %s by %g", holdAll, robot, e)
				}
			}
		}
	}
}

// One tie is not enough evidence to join two maps, but a person's word is; the other ties between them are then tested against it.
func TestRulingJoins(t *testing.T) {
	run := func(ruled func(b *base)) *base {
		b := newBase(t, 2, judging)
		ruled(b)
		x, y := newTrack("r1", 1, 10, 2, 1), newTrack("r2", 1, 10, 2, 2)
		b.summarise(x)
		b.summarise(y)
		b.sees(x, 2, y, 1)
		b.hear("r1", msgs.KindTie, b.tie(x, 8, y, 7, 9))
		b.tick(31)
		return b
	}
	b := run(func(b *base) {})
	if f := finding(t, b, "r1", "r1-1"); f.Verdict != msgs.Open || placed(t, b, "r2").Joined {
		t.Fatalf("without a ruling: %+v", f)
	}
	b = run(func(b *base) { b.rule("r1", "r1-1", msgs.Held, "by tape") })
	if f := finding(t, b, "r1", "r1-1"); f.Verdict != msgs.Held || !placed(t, b, "r2").Joined {
		t.Errorf("with a ruling: %+v", f)
	}
	if f := finding(t, b, "r1", "r1-2"); f.Verdict != msgs.Refused || !strings.HasPrefix(f.Reason, "contradicts what the other ties predict") {
		t.Errorf("the tie that contradicts it: %+v", f)
	}
	b = run(func(b *base) { b.rule("r1", "r1-1", msgs.Refused, "by tape") })
	if f := finding(t, b, "r1", "r1-1"); f.Verdict != msgs.Refused || placed(t, b, "r2").Joined ||
		f.Reason != "ruled refused by lead: by tape; nothing held connects its two robots, so nothing else speaks about it" {
		t.Errorf("refused: %+v", f)
	}
	b = run(func(b *base) { b.rule("r2", "r1-1", msgs.Held, "of another robot") })
	if f := finding(t, b, "r1", "r1-1"); f.Verdict != msgs.Open {
		t.Errorf("a ruling on a tie of another robot: %+v", f)
	}
}
