package evidence

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"selvage/internal/lie"
)

// scattered are points of a map and their known places, some of which are wrong by a metre and more.
func scattered(r *rand.Rand, planar bool, n, wrong int, sigma float64) (pose lie.SE3, from, to [][3]float64, sound []bool) {
	pose = lie.SE2{X: 40 * r.NormFloat64(), Y: 40 * r.NormFloat64(), C: 1}.Plus([3]float64{0, 0, 6 * r.Float64()}).Spatial()
	if !planar {
		pose = lie.Exp(lie.Tangent{30 * r.NormFloat64(), 30 * r.NormFloat64(), 9 * r.NormFloat64(), r.NormFloat64(), r.NormFloat64(), r.NormFloat64()})
	}
	for i := range n {
		p := [3]float64{15 * r.Float64(), 8 * r.Float64(), 4 * r.Float64()}
		if planar {
			p[2] = 0
		}
		q := pose.Apply(p)
		off := [3]float64{r.NormFloat64(), r.NormFloat64(), r.NormFloat64()}
		if planar {
			off[2] = 0
		}
		size := math.Sqrt(squaredDistance(off, [3]float64{}))
		for c := range q {
			if i < wrong {
				q[c] += off[c] / size * (1 + 9*r.Float64())
			} else {
				q[c] += sigma * off[c]
			}
		}
		from, to, sound = append(from, p), append(to, q), append(sound, i >= wrong)
	}
	return pose, from, to, sound
}

// Of many maps the wrong places are named, and the motion is that of a fit to the others.
func TestPlaceOnNamesWhatIsWrong(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 1))
	for _, planar := range []bool{true, false} {
		missed, accused, sound := 0, 0, 0
		for range 200 {
			n := 8 + r.IntN(12)
			_, from, to, good := scattered(r, planar, n, r.IntN(n/3), 0.03)
			p, ok := PlaceOn(planar, from, to, slices.Repeat([]float64{1e-6}, n))
			if !ok {
				t.Fatalf("planar %v: %d points were not placed", planar, n)
			}
			weight := make([]float64, n)
			for i := range good {
				switch {
				case good[i] && !p.Agrees[i]:
					accused++
				case !good[i] && p.Agrees[i]:
					missed++
				}
				if good[i] {
					sound++
				}
				if p.Agrees[i] {
					weight[i] = 1
				}
			}
			want, _ := lie.FitPoints(planar, from, to, weight) // all alike
			for i := range from {
				if off := math.Sqrt(squaredDistance(want.Apply(from[i]), to[i])); math.Abs(off-p.Off[i]) > 1e-9 {
					t.Fatalf("planar %v: point %d is %.6f m off, the fit says %.6f", planar, i, p.Off[i], off)
				}
			}
		}
		t.Logf("planar %v: %d of %d sound places accused, %d wrong ones missed", planar, accused, sound, missed)
		if missed > 0 || float64(accused) > 0.01*float64(sound) {
			t.Errorf("planar %v: %d of %d sound places accused, %d wrong ones missed; want at most 1 %% and none", planar, accused, sound, missed)
		}
	}
}

// Without errors nothing is left out, whatever rounding does, and the motion comes back.
func TestPlaceOnWithoutErrors(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 9))
	for _, planar := range []bool{true, false} {
		for n := 2; n < 12; n++ {
			pose, from, to, _ := scattered(r, planar, n, 0, 0)
			p, ok := PlaceOn(planar, from, to, slices.Repeat([]float64{1e-6}, n))
			if want := n >= 4 || n == 3 && planar; ok != want {
				t.Fatalf("planar %v, %d points: placed %v, want %v", planar, n, ok, want)
			}
			if !ok {
				continue
			}
			between := pose.Between(p.Pose)
			for _, d := range between.Log() {
				if math.Abs(d) > 1e-9 {
					t.Errorf("planar %v, %d points: pose off by %g", planar, n, d)
				}
			}
			if slices.Contains(p.Agrees, false) || p.Sigma > 1e-9 {
				t.Errorf("planar %v, %d points: %v, sigma %g", planar, n, p.Agrees, p.Sigma)
			}
		}
	}
}

// Two parties of equal size leave nothing that more than half of the points tell, and points in one place leave the turn open.
func TestPlaceOnRefuses(t *testing.T) {
	_, from, to, _ := scattered(rand.New(rand.NewPCG(5, 5)), true, 10, 0, 0)
	for i := range from[:5] {
		to[i][0] += 50
	}
	if p, ok := PlaceOn(true, from, to, slices.Repeat([]float64{1e-6}, 10)); ok && p.Sigma < 1 {
		t.Errorf("two parties of five: placed with a spread of %g m", p.Sigma)
	}
	same := make([][3]float64, 6)
	if _, ok := PlaceOn(true, same, same, make([]float64, 6)); ok {
		t.Error("six points in one place gave a motion")
	}
}

// A point that the map itself knows badly is not accused for it.
func TestPlaceOnKnowsWhatIsLoose(t *testing.T) {
	r := rand.New(rand.NewPCG(11, 4))
	for _, planar := range []bool{true, false} {
		accused, without := 0, 0
		for range 100 {
			_, from, to, _ := scattered(r, planar, 12, 0, 0.02)
			variance := slices.Repeat([]float64{0.02 * 0.02}, 12)
			variance[3] = 0.5 * 0.5
			to[3][0] += 0.5 * r.NormFloat64()
			to[3][1] += 0.5 * r.NormFloat64()
			p, ok := PlaceOn(planar, from, to, variance)
			if !ok {
				t.Fatal("not placed")
			}
			if !p.Agrees[3] {
				accused++
			}
			if p, _ := PlaceOn(planar, from, to, slices.Repeat([]float64{0.02 * 0.02}, 12)); !p.Agrees[3] {
				without++
			}
		}
		if accused > 2 || without < 80 {
			t.Errorf("planar %v: accused %d times in 100, %d without its variance; want 2 at most, and often", planar, accused, without)
		}
	}
}
