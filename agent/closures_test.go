package agent

import (
	"math"
	"testing"

	"selvage/internal/lie"
	"selvage/msgs"
)

// twoRounds lets the robot walk twice round a square of 20 m with faultless odometry and gives it two true loop closures and a false one.
func twoRounds(r *robot) (truth []lie.SE3) {
	x := lie.Identity()
	info := [36]float64{0: 2500, 7: 2500, 35: 3e5}
	for k := range int64(161) {
		step := lie.Tangent{0: 1}
		if k%20 == 0 {
			step[5] = math.Pi / 2
		}
		if k > 0 {
			x = x.Mul(lie.Exp(step))
		}
		truth = append(truth, x)
		r.now += second
		r.do(Keyframe{Session: 1, ID: 10 * k, StampNS: r.now, Pose: x})
		if k > 0 {
			z := truth[k-1].Between(x)
			if k%2 == 0 { // measured backwards
				r.do(Relative{Session: 1, From: 10 * k, To: 10 * (k - 1), Z: z.Inv(), Info: info})
			} else {
				r.do(Relative{Session: 1, From: 10 * (k - 1), To: 10 * k, Z: z, Info: info})
			}
		}
		for _, c := range [3][2]int64{{9, 89}, {22, 102}, {70, 110}} {
			if k == c[1] {
				z := truth[c[0]].Between(x)
				if c[0] == 70 {
					z = lie.Exp(lie.Tangent{0: 0.5, 5: 0.4})
				}
				r.do(Relative{Session: 1, From: 10 * c[0], To: 10 * c[1], Z: z, Info: [36]float64{0: 400, 7: 400, 35: 4e4}, Closure: true})
			}
		}
	}
	return truth
}

// bend is how far the map lies from the truth at most, m.
func bend(r *robot, truth []lie.SE3) (worst float64) {
	for k, x := range r.Tracks()[0].Poses {
		worst = math.Max(worst, math.Hypot(x.T[0]-truth[k].T[0], x.T[1]-truth[k].T[1]))
	}
	return worst
}

// A false loop closure does not touch the map, true ones do; before anything is judged all are open and have no weight.
func TestClosuresAreJudged(t *testing.T) {
	r := newRobot(t, 2)
	truth := twoRounds(r)
	for _, c := range r.Closures() {
		if c.Verdict != msgs.Open || c.DoF != 0 {
			t.Errorf("before the map was brought up to date: %+v", c)
		}
	}
	r.tick(60)
	got := r.Closures()
	if len(got) != 3 {
		t.Fatalf("%d closures", len(got))
	}
	for k, want := range []Closure{
		{Session: 1, From: 90, To: 890, Verdict: msgs.Held}, {Session: 1, From: 220, To: 1020, Verdict: msgs.Held}, {Session: 1, From: 700, To: 1100, Verdict: msgs.Refused},
	} {
		if c := got[k]; c.Session != want.Session || c.From != want.From || c.To != want.To || c.Verdict != want.Verdict || c.Reason == "" || c.DoF != 3 {
			t.Errorf("closure %d: %+v, want %+v", k, c, want)
		}
	}
	if b := bend(r, truth); b > 1e-6 {
		t.Errorf("the map is bent by %g m", b)
	}
}

// With HoldAll nothing is judged, and the false one bends the map.
func TestClosuresAllHeld(t *testing.T) {
	r := newRobot(t, 2)
	r.cfg.HoldAll = true
	truth := twoRounds(r)
	r.tick(60)
	if got := r.Closures(); len(got) != 0 {
		t.Errorf("judged: %+v", got)
	}
	if b := bend(r, truth); b < 1 {
		t.Errorf("the map is bent by %g m only", b)
	}
}

// A refused closure is not in the summary: the condensed graph has the cost of the rest, which is faultless.
func TestRefusedClosureIsNotTold(t *testing.T) {
	r := newRobot(t, 2)
	twoRounds(r)
	r.want(func(w *msgs.Want) {
		w.Keys = []msgs.KeyRef{{Robot: "r1", Session: 1, ID: 700}, {Robot: "r1", Session: 1, ID: 1100}}
	})
	var last *msgs.Summary
	for _, p := range r.tick(60) {
		if p.Kind == msgs.KindSummary {
			s, err := msgs.DecodeSummary(p.Payload)
			if err != nil {
				t.Fatal(err)
			}
			last = s
		}
	}
	if last == nil || len(last.Parts) != 1 || last.Parts[0].Cost > 1e-9 {
		t.Fatalf("summary %+v", last)
	}
}
