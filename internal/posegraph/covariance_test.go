package posegraph

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"

	"selvage/internal/lie"
)

// inverse of the twin's matrix.
func inverse(t failer, w dense) *mat.SymDense {
	var chol mat.Cholesky
	var inv mat.SymDense
	if w.size == 0 {
		return nil
	}
	if !chol.Factorize(w.h) {
		t.Fatalf("twin is singular")
	}
	if err := chol.InverseTo(&inv); err != nil {
		t.Fatalf("twin: %v", err)
	}
	return &inv
}

// block i j of the inverse, zero where one is fixed.
func (w *dense) block(inv *mat.SymDense, dim int, i, j int32) []float64 {
	out := make([]float64, dim*dim)
	if w.offset[i] >= 0 && w.offset[j] >= 0 {
		for k := range out {
			out[k] = inv.At(w.offset[i]+k/dim, w.offset[j]+k%dim)
		}
	}
	return out
}

func TestCovariance(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			n := rapid.IntRange(1, 8).Draw(t, "poses")
			g := sample(r, dim, n, 0.1, true)
			fixed := fixSome(r, n)
			s := solver(t, g, fixed)
			w := twin(g, fixed)
			inv := inverse(t, w)
			scale := 1e-3
			if inv != nil {
				scale = math.Max(scale, mat.Max(inv))
			}
			sigma, err := s.Covariance()
			if err != nil {
				t.Fatal(err)
			}
			for v := range int32(n) {
				got := sigma.Of(v)
				if w.offset[v] < 0 {
					if got != nil {
						t.Fatalf("fixed pose %d has a covariance", v)
					}
					continue
				}
				near(t, "of", got, w.block(inv, dim, v, v), 1e-6, scale)
			}
			across := make([]float64, dim*dim)
			for _, set := range g.Sets {
				switch b := set.(type) {
				case *Between:
					for k := range b.I {
						across[0] = math.NaN()
						sigma.Across(b.slots[k], across)
						near(t, "across", across, w.block(inv, dim, b.I[k], b.J[k]), 1e-6, scale)
					}
				case *Cliques:
					for k := range b.list {
						nodes := b.list[k].nodes
						near(t, "joint of a clique", b.Joint(k, sigma), w.joint(inv, dim, nodes), 1e-6, scale)
					}
				}
			}
			var some []int32
			for _, v := range r.Perm(n)[:1+r.IntN(n)] {
				some = append(some, int32(v))
			}
			joint, err := s.Joint(some)
			if err != nil {
				t.Fatal(err)
			}
			near(t, "joint", joint, w.joint(inv, dim, some), 1e-6, scale)
		})
	})
}

func (w *dense) joint(inv *mat.SymDense, dim int, nodes []int32) []float64 {
	n := dim * len(nodes)
	out := make([]float64, n*n)
	for a, i := range nodes {
		for b, j := range nodes {
			for k, x := range w.block(inv, dim, i, j) {
				out[(a*dim+k/dim)*n+b*dim+k%dim] = x
			}
		}
	}
	return out
}

// The innovation of a measurement that is not part of the solution: r' (J Sigma J' + C)^-1 r with J by differences.
func TestInnovation(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			n := rapid.IntRange(2, 7).Draw(t, "poses")
			g := sample(r, dim, n, 0.1, false)
			b := g.AddBetween()
			i := int32(r.IntN(n))
			j := int32(r.IntN(n - 1))
			if j >= i {
				j++
			}
			b.Add(i, j, turned(r, dim, 5, 3*r.Float64()), &[36]float64{})
			b.W[0] = 0
			fixed := fixSome(r, n)
			s := solver(t, g, fixed)
			w := twin(g, fixed)
			inv := inverse(t, w)
			sigma, err := s.Covariance()
			if err != nil {
				t.Fatal(err)
			}
			c := information(r)
			got := b.Innovation(0, &g.Values, sigma, &c)

			residual := func(v *Values) []float64 {
				x := b.Residual(0, v)
				return pick(dim, &x)
			}
			jac := jacobian(g, []int32{i, j}, residual)
			var js, m mat.Dense
			js.Mul(jac, mat.NewDense(2*dim, 2*dim, w.joint(inv, dim, []int32{i, j})))
			m.Mul(&js, jac.T())
			full := mat.NewSymDense(dim, nil)
			for a, p := range components(dim) {
				for b, q := range components(dim) {
					full.SetSym(a, b, (m.At(a, b)+m.At(b, a))/2+c[6*p+q])
				}
			}
			var chol mat.Cholesky
			if !chol.Factorize(full) {
				t.Fatalf("innovation is singular")
			}
			e := mat.NewVecDense(dim, residual(&g.Values))
			var x mat.VecDense
			if err := chol.SolveVecTo(&x, e); err != nil {
				t.Fatal(err)
			}
			near(t, "innovation", []float64{got}, []float64{mat.Dot(e, &x)}, 1e-5, 1e-3)
		})
	})
}

func TestCovarianceOfWhatIsUndetermined(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		g := New(dim, []lie.SE3{lie.Identity(), lie.Identity()})
		s := solver(t, g, []int32{0})
		if _, err := s.Covariance(); err == nil {
			t.Error("covariance of a free pose")
		}
		if _, err := s.Joint([]int32{1}); err == nil {
			t.Error("joint covariance of a free pose")
		}
		b := g.AddBetween()
		b.Add(0, 1, lie.Identity(), &[36]float64{})
		s = solver(t, g, []int32{0, 1})
		sigma, err := s.Covariance()
		if err != nil {
			t.Fatal(err)
		}
		if x := b.Innovation(0, &g.Values, sigma, &[36]float64{}); !math.IsInf(x, 1) {
			t.Errorf("innovation without any uncertainty: %g, want +Inf", x)
		}
	})
}
