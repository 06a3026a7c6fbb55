package posegraph

import (
	"math"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// A chain whose ends are known and that was bent by a whole turn stays bent however it is adjusted; unwound it costs nothing. Chains that
// are right, or bent by less, are left alone.
func TestUnwind(t *testing.T) {
	for _, turns := range []float64{1, -1} {
		truth := []lie.SE3{lie.Identity()}
		for k := range 29 {
			truth = append(truth, truth[k].Mul(lie.Exp(lie.Tangent{0: 0.3, 5: 0.2 * math.Sin(float64(k))})))
		}
		g := New(3, append([]lie.SE3(nil), truth...))
		b := g.AddBetween()
		soft := [36]float64{0: 400, 7: 400, 14: 1, 21: 1, 28: 1, 35: 25}
		for k := range int32(29) {
			b.Add(k, k+1, truth[k].Between(truth[k+1]), &soft)
		}
		if Unwind(g) {
			t.Error("something to unwind in the truth")
		}
		for k := 10; k < 18; k++ { // half a turn is not a whole one
			g.Values.Poses[k].R = g.Values.Poses[k].Mul(lie.Exp(lie.Tangent{5: turns * math.Pi / 2 * float64(k-9) / 9})).R
		}
		if Unwind(g) {
			t.Error("something to unwind in a quarter of a turn")
		}
		for k := 10; k < 18; k++ {
			g.Values.Poses[k].R = truth[k].Mul(lie.Exp(lie.Tangent{5: turns * 2 * math.Pi * float64(k-9) / 9})).R
		}
		s, err := NewSolver(g, []int32{0, 9, 18, 29}, sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		if r := s.Optimise(DefaultOptions()); r.Stop != Converged || r.Cost < 10 {
			t.Errorf("bent: %v, cost %g", r.Stop, r.Cost)
		}
		if !Unwind(g) {
			t.Fatal("nothing to unwind in a whole turn")
		}
		if r := s.Optimise(DefaultOptions()); r.Stop != Converged || r.Cost > 1e-12 {
			t.Errorf("unwound: %v, cost %g", r.Stop, r.Cost)
		}
	}
}
