package posegraph

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// Leaving a sighting out of the solution, whatever its weight there, gives the statistic of its innovation: by the covariance of
// a solver from which it was really taken away, and the residual moved by the step that this implies.
func TestLeaveOneOut(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(5)
		for range 6 {
			g, _ := fleetOfMarks(r, dim, 8, 4)
			s, err := NewSolver(g, []int32{3}, sparse.Options{})
			if err != nil {
				t.Fatal(err)
			}
			for _, set := range g.Sets {
				e, ok := set.(*Sightings)
				if !ok {
					continue
				}
				for k := range e.From {
					for _, w := range []float64{1, 0.3, 1e-7, 0} {
						e.W[k] = w
						sigma, err := s.Covariance()
						if err != nil {
							t.Fatal(err)
						}
						got, freedoms, loose := e.LeaveOneOut(k, &g.Values, sigma)
						e.W[k] = 0
						without, err := s.Covariance()
						if err != nil {
							t.Fatal(err)
						}
						var at []int
						for i := range 3 {
							if e.Info(k)[4*i] > 0 {
								at = append(at, i)
							}
						}
						p, z, n := e.Predicted(k, &g.Values, without), e.Residual(k, &g.Values), len(at)
						P, info, res := mat.NewDense(n, n, nil), mat.NewDense(n, n, nil), mat.NewVecDense(n, nil)
						for i, a := range at {
							res.SetVec(i, z[a])
							for j, b := range at {
								P.Set(i, j, p[3*a+b])
								info.Set(i, j, e.Info(k)[3*a+b])
							}
						}
						var step, moved, x mat.VecDense
						step.MulVec(info, res)
						moved.MulVec(P, &step)
						moved.AddScaledVec(res, w, &moved)
						var S mat.Dense
						if err := S.Inverse(info); err != nil {
							t.Fatal(err)
						}
						S.Add(&S, P)
						if err := x.SolveVec(&S, &moved); err != nil {
							t.Fatal(err)
						}
						near(t, "leave one out", []float64{got}, []float64{mat.Dot(&moved, &x)}, 1e-6, 1)
						var eigen mat.Eigen
						var product mat.Dense
						product.Mul(info, P)
						if !eigen.Factorize(&product, mat.EigenNone) {
							t.Fatal("no eigenvalues")
						}
						most := 0.0
						for _, l := range eigen.Values(nil) {
							most = math.Max(most, real(l))
						}
						near(t, "predicted variance over its own", []float64{loose}, []float64{most}, 1e-6, 1)
						if freedoms != n {
							t.Errorf("%d degrees of freedom, want %d", freedoms, n)
						}
						e.W[k] = 1
					}
				}
			}
		}
	})
}

// A sighting that alone places its mark has nothing to be tested against; a second one of its range has one freedom.
func TestLeaveOneOutAlone(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(8)
		g := sample(r, dim, 3, 0.01, false)
		g.Values.Points = [][3]float64{spot(r, dim, 5)}
		place, ranges := g.AddSightings(Position), g.AddSightings(Range)
		mount := turned(r, dim, 1, 1)
		info := lie.Mat3{100, 0, 0, 0, 100, 0, 0, 0, 100}
		add := func(s *Sightings, from int32) {
			s.Add(from, 0, mount, [3]float64{}, measured(s.sense, dim, g.Values.Poses[from], mount, g.Values.Points[0]), &info)
		}
		add(place, 1)
		tested := func(s *Sightings) int {
			solver, err := NewSolver(g, []int32{0}, sparse.Options{})
			if err != nil {
				t.Fatal(err)
			}
			sigma, err := solver.Covariance()
			if err != nil {
				t.Fatal(err)
			}
			_, freedoms, loose := s.LeaveOneOut(0, &g.Values, sigma)
			if whole := s == ranges; whole == math.IsInf(loose, 1) {
				t.Errorf("predicted variance %g of its own; predicted whole: %v", loose, whole)
			}
			return freedoms
		}
		if n := tested(place); n != 0 {
			t.Errorf("alone: %d degrees of freedom", n)
		}
		add(ranges, 2)
		if a, b := tested(place), tested(ranges); a != 1 || b != 1 {
			t.Errorf("place and range: %d and %d degrees of freedom, want 1 and 1", a, b)
		}
	})
}
