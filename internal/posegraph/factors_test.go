package posegraph

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"

	"selvage/internal/lie"
)

// One relative pose, its residual turned by up to 3 rad: gradient and Gauss-Newton matrix against differences of the residual.
func TestBetweenAgainstDifferences(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			angle := rapid.SampledFrom([]float64{0, 1e-9, 1e-5, 0.009, 0.011, 0.05, 0.299, 0.301, 1, 2, 3}).Draw(t, "angle")
			x := []lie.SE3{turned(r, dim, 10, 3*r.Float64()), turned(r, dim, 10, 3*r.Float64())}
			g := New(dim, x)
			b := g.AddBetween()
			info := information(r)
			b.Add(0, 1, x[0].Between(x[1]).Mul(turned(r, dim, 2, angle).Inv()), &info)
			b.W[0] = 0.5 + r.Float64()

			n := 2 * dim
			h, grad := make([]float64, n*n), make([]float64, n)
			for i := range h {
				h[i] = math.NaN() // must be overwritten
			}
			b.Quadratic(0, &g.Values, h, grad)
			w := twin(g, nil)
			near(t, "gradient", grad, w.g, 1e-7, 1)
			near(t, "matrix", h, w.h.RawSymmetric().Data, 1e-7, 1)
			near(t, "cost", []float64{g.Cost()}, []float64{w.cost}, 1e-12, 1)
			near(t, "chi2", []float64{b.Chi2(0, &g.Values) * b.W[0] / 2}, []float64{w.cost}, 1e-12, 1)
		})
	})
}

// A common motion of all poses is the perturbation Ad(X_k^-1) tau: it changes no residual, so H N = 0 and g' N = 0 wherever the
// graph is linearised.
func TestGauge(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			g := sample(r, dim, rapid.IntRange(2, 9).Draw(t, "poses"), 0.3, true)
			n := len(g.Values.Poses)
			// Every component of a fixed extra pose without factors leaves all others free.
			g.Values.Poses = append(g.Values.Poses, lie.Identity())
			s := solver(t, g, []int32{int32(n)})
			_, grad := s.Linearise()
			scale := 0.0
			for k := range grad {
				for _, v := range column(s, k) {
					scale = math.Max(scale, math.Abs(v))
				}
			}
			for _, c := range components(dim) {
				motion := make([]float64, len(grad))
				for k := range n {
					x := g.Values.Poses[k].Inv()
					ad := x.Adjoint()
					for i, row := range components(dim) {
						motion[k*dim+i] = ad[6*row+c]
					}
				}
				y := make([]float64, len(grad))
				s.now.Matrix.Mul(motion, y)
				near(t, "H N", y, make([]float64, len(y)), 1e-11, 10*scale)
				dot := 0.0
				for i := range grad {
					dot += grad[i] * motion[i]
				}
				near(t, "g' N", []float64{dot}, []float64{0}, 1e-11, 10*scale)
			}
		})
	})
}

// A clique at the poses where it was condensed has the gradient and the matrix of the measurements behind it, all rows included, those of
// the reference too, though they are not handed over.
func TestCliqueIsWhatWasCondensed(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		for seed := range uint64(20) {
			r := random(seed)
			const n, kept = 7, 3
			g := sample(r, dim, n, 0.2, false)
			full := twinOfQuadratics(g)
			// Schur complement onto the first poses.
			k, m := kept*dim, (n-kept)*dim
			hnn, hnv, hvv := full.h.SliceSym(0, k), full.h.(*mat.SymDense), full.h.SliceSym(k, k+m)
			var chol mat.Cholesky
			if !chol.Factorize(hvv) {
				t.Fatal("interior is singular")
			}
			cross := mat.NewDense(k, m, nil)
			for i := range k {
				for j := range m {
					cross.Set(i, j, hnv.At(i, k+j))
				}
			}
			var solved, h mat.Dense
			if err := chol.SolveTo(&solved, cross.T()); err != nil {
				t.Fatal(err)
			}
			h.Mul(cross, &solved)
			h.Sub(hnn, &h)
			var y, grad mat.VecDense
			if err := chol.SolveVecTo(&y, mat.NewVecDense(m, full.g[k:])); err != nil {
				t.Fatal(err)
			}
			grad.MulVec(cross, &y)
			grad.SubVec(mat.NewVecDense(k, full.g[:k]), &grad)

			// The clique refers to pose 0; two poses of no factor carry the fixed datum.
			d := k - dim
			hc, bc := make([]float64, d*d), make([]float64, d)
			for i := range d {
				bc[i] = grad.AtVec(dim + i)
				for j := range d {
					hc[i*d+j] = h.At(dim+i, dim+j)
				}
			}
			at := g.Values.Poses[:kept]
			moved := make([]lie.SE3, kept, kept+1)
			motion := turned(r, dim, 1000, 2)
			for i := range moved {
				moved[i] = motion.Mul(at[i])
			}
			c := New(dim, append(moved, lie.Identity()))
			c.AddCliques().Add([]int32{0, 1, 2}, at, hc, bc)
			s := solver(t, c, []int32{kept})
			cost, got := s.Linearise()
			near(t, "cost", []float64{cost}, []float64{0}, 1e-9, 1)
			near(t, "gradient", got, grad.RawVector().Data, 1e-8, 1)
			for i := range k {
				near(t, "matrix", column(s, i), mat.Row(nil, i, &h), 1e-9, mat.Max(&h))
			}
		}
	})
}

type system struct {
	h interface {
		mat.Symmetric
		SliceSym(i, k int) mat.Symmetric
	}
	g []float64
}

// twinOfQuadratics adds up the factors' own second-order models, exact to rounding.
func twinOfQuadratics(g *Graph) system {
	n := g.Dim * len(g.Values.Poses)
	full, grad := make([]float64, n*n), make([]float64, n)
	d := g.Dim
	h, b := make([]float64, 4*d*d), make([]float64, 2*d)
	for _, set := range g.Sets {
		s := set.(*Between)
		for k := range s.I {
			s.Quadratic(k, &g.Values, h, b)
			ends := [2]int{int(s.I[k]) * d, int(s.J[k]) * d}
			for r := range 2 * d {
				row := ends[r/d] + r%d
				grad[row] += b[r]
				for c := range 2 * d {
					full[row*n+ends[c/d]+c%d] += h[r*2*d+c]
				}
			}
		}
	}
	return system{mat.NewSymDense(n, full), grad}
}

// Cost and gradient of cliques do not see a common motion; the cost is what its definition says.
func TestCliquesIgnoreTheFrame(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			n := rapid.IntRange(2, 6).Draw(t, "poses")
			poses := make([]lie.SE3, n, n+1)
			for i := range poses {
				poses[i] = turned(r, dim, 10, 3*r.Float64())
			}
			g := New(dim, append(poses, lie.Identity()))
			c := addCliques(r, g, poses, 0.5)
			w := twin(g, []int32{int32(n)})
			s := solver(t, g, []int32{int32(n)})
			before, gradient := s.Linearise()
			near(t, "cost", []float64{before, c.Cost(&g.Values)}, []float64{w.cost, w.cost}, 1e-11, 1)
			near(t, "gradient", gradient, w.g, 1e-7, 1)
			kept := append([]float64(nil), gradient...)
			motion := turned(r, dim, 100, 3*r.Float64())
			for i := range n {
				g.Values.Poses[i] = motion.Mul(g.Values.Poses[i])
			}
			after, gradient := s.Linearise()
			near(t, "cost after a common motion", []float64{after}, []float64{before}, 1e-9, 1)
			near(t, "gradient after a common motion", gradient, kept, 1e-9, 1)
		})
	})
}

func TestCliqueOfWrongShapePanics(t *testing.T) {
	for name, add := range map[string]func(c *Cliques){
		"one node":   func(c *Cliques) { c.Add([]int32{0}, make([]lie.SE3, 1), nil, nil) },
		"poses":      func(c *Cliques) { c.Add([]int32{0, 1}, make([]lie.SE3, 1), make([]float64, 9), make([]float64, 3)) },
		"matrix":     func(c *Cliques) { c.Add([]int32{0, 1}, make([]lie.SE3, 2), make([]float64, 8), make([]float64, 3)) },
		"right side": func(c *Cliques) { c.Add([]int32{0, 1}, make([]lie.SE3, 2), make([]float64, 9), make([]float64, 2)) },
	} {
		panics(t, name, func() { add(New(3, make([]lie.SE3, 2)).AddCliques()) })
	}
}

func panics(t *testing.T, name string, f func()) {
	t.Helper()
	defer func() {
		if recover() == nil {
			t.Errorf("%s: no panic", name)
		}
	}()
	f()
}
