package agent

import (
	"fmt"
	"math"
	"testing"

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
