package posegraph

import (
	"math"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// A row of keyframes that hold together firmly stands between two control points, and all ranges to these are half a metre short:
// across the line to them the ranges bend 50 times as much as anything else holds, so the step of Gauss and Newton overshoots 50
// times however near the optimum it is, and damping each keyframe by itself holds the row where it stands.
func TestOvershootIsCutShort(t *testing.T) {
	const n = 40
	turn := lie.Exp(lie.Tangent{5: 0.7})
	g := New(3, nil)
	for k := range n {
		x := turn.Mul(lie.Exp(lie.Tangent{0: 1e-3 * float64(k), 1: 0.2}))
		g.Values.Poses = append(g.Values.Poses, x)
	}
	g.Values.Points = [][3]float64{turn.Apply([3]float64{-2, 0, 0}), turn.Apply([3]float64{2, 0, 0})}
	p := g.AddPointPriors()
	for k, at := range g.Values.Points {
		p.Add(int32(k), at, &lie.Mat3{1e10, 0, 0, 0, 1e10, 0, 0, 0, 1})
	}
	b, firm := g.AddBetween(), [36]float64{0: 1e8, 7: 1e8, 14: 1, 21: 1, 28: 1, 35: 1e8}
	for k := range int32(n - 1) {
		z := g.Values.Poses[k].Between(g.Values.Poses[k+1])
		b.Add(k, k+1, z, &firm)
	}
	s := g.AddSightings(Range)
	for k := range int32(n) {
		for m := range int32(2) {
			s.Add(k, m, lie.Identity(), [3]float64{}, [3]float64{1.5}, &lie.Mat3{100})
		}
	}
	bearings := g.AddSightings(Bearing)
	bearings.Add(0, 0, lie.Identity(), [3]float64{}, [3]float64{1: math.Pi}, &lie.Mat3{4: 400})
	bearings.Add(n-1, 1, lie.Identity(), [3]float64{}, [3]float64{1: 0}, &lie.Mat3{4: 400})
	solver, err := NewSolver(g, nil, sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	r := solver.Optimise(DefaultOptions())
	t.Logf("%+v", r)
	if r.Stop != Converged || r.Iterations > 80 {
		t.Errorf("%v after %d steps, want converged within 80", r.Stop, r.Iterations)
	}
	// By symmetry the row ends on the line, where every pair of ranges is too short by half a metre each.
	if off := turn.Inv().Apply(g.Values.Poses[n/2].T); math.Abs(off[1]) > 1e-4 || math.Abs(r.Cost-n*2*0.5*100*0.25) > 1 {
		t.Errorf("cost %.4f, middle of the row at %v", r.Cost, off)
	}
}
