package agent

import (
	"fmt"
	"math"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/survey"
	"selvage/msgs"
)

// judged counts what the robots made of their sightings: wrong ones held, true ones refused.
func (f *fleet) judged() (wrong, wrongHeld, right, rightRefused int) {
	for i, a := range f.agents {
		for k, e := range a.Sightings() {
			if f.wrong[fmt.Sprint(f.survey.Robots[i].ID, k)] {
				wrong++
				if e.Verdict == msgs.Held {
					wrongHeld++
				}
			} else {
				right++
				if e.Verdict == msgs.Refused {
					rightRefused++
				}
			}
		}
	}
	return
}

// TestWrongIdentities: of the sightings that name another mark than was seen hardly any is believed, and hardly a true one refused (a mark
// seen twice, once wrongly, loses both); the maps of the robots are the adjustment in one piece of what is held.
func TestWrongIdentities(t *testing.T) {
	for _, dim := range []int{2, 3} {
		for _, share := range []float64{0.02, 0.1, 0.25} {
			t.Run(fmt.Sprintf("%d/%g", dim, share), func(t *testing.T) {
				var wrong, wrongHeld, right, rightRefused int
				for seed := range uint64(3) {
					f := newFleet(t, 20+seed, plan{
						dim: dim, robots: 3, keyframes: 60, shared: 8, private: 4, ties: 3, encounters: 6, stamps: true, wrong: share,
						kinds: []survey.Kind{survey.RangeBearing, survey.Position},
					}, false)
					f.run()
					a, b, c, d := f.judged()
					wrong, wrongHeld, right, rightRefused = wrong+a, wrongHeld+b, right+c, rightRefused+d
					if gap, _ := f.gap(); !(math.Abs(gap) <= 1e-9) {
						t.Errorf("seed %d: gap %g", seed, gap)
					}
				}
				t.Logf("%d of %d wrong ones held, %d of %d true ones refused", wrongHeld, wrong, rightRefused, right)
				if wrongHeld*50 > wrong || rightRefused*50 > right || wrong == 0 {
					t.Errorf("%d of %d wrong ones held, %d of %d true ones refused", wrongHeld, wrong, rightRefused, right)
				}
			})
		}
	}
}

// TestDoubtBetweenSummaries: what a joined robot sees wrongly between two summaries does not bend its map until the next one decides.
func TestDoubtBetweenSummaries(t *testing.T) {
	for _, dim := range []int{2, 3} {
		r := newRobot(t, dim)
		r.walk(1, 0, 45, 3)
		r.glance(1, 3, 9, "a", lie.Identity())
		for _, id := range []int64{5, 40} {
			r.see(1, id)
		}
		r.tick(1)
		if err := r.correct(bent(r.Agent, 1, 1)); err != nil {
			t.Fatal(err)
		}
		s := r.sessions[0]
		if err := s.refresh(); err != nil {
			t.Fatal(err)
		}
		before := r.Tracks()[0]
		wrong := ranged
		wrong.Value = [3]float64{9, -2}
		r.do(Sighting{Session: 1, ID: 25, Mark: "a", Sight: wrong})
		if err := s.refresh(); err != nil {
			t.Fatal(err)
		}
		verdict := func() msgs.VerdictKind { all := r.Sightings(); return all[len(all)-1].Verdict }
		if off := apart(before.Poses, r.Tracks()[0].Poses); off > 1e-4 || verdict() != msgs.Open {
			t.Errorf("dimension %d: poses moved by %g; the sighting is %v", dim, off, verdict())
		}
		r.tick(60)
		if verdict() != msgs.Refused {
			t.Errorf("dimension %d: after a summary the sighting is %v", dim, verdict())
		}
		if off := apart(before.Poses, r.Tracks()[0].Poses); off > 0.2 {
			t.Errorf("dimension %d: poses moved by %g", dim, off)
		}
	}
}
