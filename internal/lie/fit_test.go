package lie

import (
	"math"
	"math/rand/v2"
	"testing"
)

// A motion is found again from what it did to points; no motion near it brings noisy points nearer.
func TestFitPoints(t *testing.T) {
	for seed := range uint64(100) {
		r := rand.New(rand.NewPCG(seed, 9))
		for _, planar := range []bool{true, false} {
			x := Exp(Tangent{r.NormFloat64(), r.NormFloat64(), r.NormFloat64(), r.NormFloat64(), r.NormFloat64(), r.NormFloat64()})
			n := 3 + r.IntN(5)
			if planar {
				x = Exp2([3]float64{r.NormFloat64(), r.NormFloat64(), 3 * r.NormFloat64()}).Spatial()
				n--
			}
			var from, to, noisy [][3]float64
			var w []float64
			for range n {
				p := [3]float64{10 * r.NormFloat64(), 10 * r.NormFloat64(), 10 * r.NormFloat64()}
				if planar {
					p[2] = 0
				}
				q := x.Apply(p)
				from, to, w = append(from, p), append(to, q), append(w, 0.1+r.Float64())
				noisy = append(noisy, [3]float64{q[0] + r.NormFloat64(), q[1] + r.NormFloat64(), q[2]})
			}
			got, ok := FitPoints(planar, from, to, nil)
			d := x.Between(got)
			for _, v := range d.Log() {
				if !ok || math.Abs(v) > 1e-7 {
					t.Fatalf("seed %d, planar %v: off by %v, %v", seed, planar, d.Log(), ok)
				}
			}
			best, _ := FitPoints(planar, from, noisy, w)
			cost := func(x SE3) (sum float64) {
				for i := range from {
					q := x.Apply(from[i])
					for c := range q {
						sum += w[i] * (q[c] - noisy[i][c]) * (q[c] - noisy[i][c])
					}
				}
				return sum
			}
			for c := range 6 {
				if planar && c != 0 && c != 1 && c != 5 {
					continue
				}
				for _, h := range []float64{-0.01, 0.01} {
					var step Tangent
					step[c] = h
					if cost(best.Plus(step)) < cost(best) {
						t.Fatalf("seed %d, planar %v: a step along %d is better", seed, planar, c)
					}
				}
			}
		}
	}
	if _, ok := FitPoints(true, [][3]float64{{1, 2}, {1, 2}}, [][3]float64{{1, 2}, {1, 2}}, nil); ok {
		t.Error("one place determines a rotation in the plane")
	}
	if _, ok := FitPoints(false, [][3]float64{{1}, {2}, {3}}, [][3]float64{{1}, {2}, {3}}, nil); ok {
		t.Error("points in line determine a rotation in space")
	}
}
