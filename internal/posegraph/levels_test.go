package posegraph

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"selvage/internal/lie"
)

// The cost of a level is half the squared angle between the vertical it saw and that of its pose, in sigmas; its gradient and
// Gauss-Newton matrix are those of differences, and neither a turn about the vertical nor a shift changes it.
func TestLevelAgainstDifferences(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		r := random(rapid.Uint64().Draw(t, "seed"))
		x := turned(r, 6, 10, 3*r.Float64())
		up := turned(r, 6, 0, 3*r.Float64()).R.Apply([3]float64{0, 0, 1})
		if rapid.Bool().Draw(t, "near") {
			x.R = lie.ExpSO3([3]float64{1e-5 * r.NormFloat64(), 1e-5 * r.NormFloat64(), 0})
			up = [3]float64{0, 0, 1}
		}
		const sigma = 0.5
		g := New(6, []lie.SE3{lie.Identity(), x})
		g.AddLevels().Add(1, up, sigma)
		w := x.R.T().Apply([3]float64{0, 0, 1})
		angle := math.Atan2(length(cross(up, w)), up[0]*w[0]+up[1]*w[1]+up[2]*w[2])
		if angle > 3 { // the tilt of a pose upside down has no direction
			t.Skip()
		}
		near(t, "cost", []float64{g.Cost()}, []float64{angle * angle / sigma / sigma / 2}, 1e-9, 1)
		s := solver(t, g, []int32{0})
		cost, grad := s.Linearise()
		near(t, "cost with derivatives", []float64{cost}, []float64{g.Cost()}, 1e-12, 1)
		const step = 1e-6
		want := make([]float64, 6)
		residual := func() [2]float64 { r, _ := g.Sets[0].(*Levels).residual(0, &g.Values); return r }
		var J [2][6]float64
		for c := range 6 {
			g.Values.Poses[1] = plus(x, c, step)
			upper, a := g.Cost(), residual()
			g.Values.Poses[1] = plus(x, c, -step)
			lower, b := g.Cost(), residual()
			want[c] = (upper - lower) / (2 * step)
			for i := range 2 {
				J[i][c] = (a[i] - b[i]) / (2 * step)
			}
		}
		g.Values.Poses[1] = x
		near(t, "gradient", grad, want, 1e-5, 1)
		h := s.now.Matrix.Diag(0)
		var full []float64
		for i := range 6 {
			for k := range 6 {
				full = append(full, (J[0][i]*J[0][k]+J[1][i]*J[1][k])/sigma/sigma)
			}
		}
		near(t, "matrix", h, full, 1e-5, 1)
		move := lie.Exp(lie.Tangent{3, -2, 5, 0, 0, 2})
		g.Values.Poses[1] = move.Mul(x)
		near(t, "cost after a turn and a shift", []float64{g.Cost()}, []float64{cost}, 1e-9, 1)
	})
}
