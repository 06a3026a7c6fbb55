package posegraph

import (
	"testing"

	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"
)

// Jacobians by differences, J Sigma J' and products with the whole covariance by dense algebra, for factors that count and one that
// does not.
func TestPredicted(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			n := rapid.IntRange(2, 7).Draw(t, "poses")
			g := sample(r, dim, n, 0.1, false)
			idle := g.AddBetween()
			i := int32(r.IntN(n))
			j := (i + 1 + int32(r.IntN(n-1))) % int32(n)
			idle.Add(i, j, turned(r, dim, 5, 3*r.Float64()), &[36]float64{})
			idle.W[0] = 0
			fixed := fixSome(r, n)
			s := solver(t, g, fixed)
			w := twin(g, fixed)
			inv := inverse(t, w)
			sigma, err := s.Covariance()
			if err != nil {
				t.Fatal(err)
			}
			for _, set := range g.Sets {
				b, ok := set.(*Between)
				if !ok {
					continue
				}
				for k := range b.I {
					ends := []int32{b.I[k], b.J[k]}
					jac := jacobian(g, ends, func(v *Values) []float64 {
						x := b.Residual(k, v)
						return pick(dim, &x)
					})
					ji, jj := make([]float64, dim*dim), make([]float64, dim*dim)
					b.Jacobians(k, &g.Values, ji, jj)
					for a := range dim {
						near(t, "J_i", ji[a*dim:(a+1)*dim], jac.RawRowView(a)[:dim], 1e-6, 1)
						near(t, "J_j", jj[a*dim:(a+1)*dim], jac.RawRowView(a)[dim:], 1e-6, 1)
					}
					var js, m mat.Dense
					js.Mul(jac, mat.NewDense(2*dim, 2*dim, w.joint(inv, dim, ends)))
					m.Mul(&js, jac.T())
					p := make([]float64, dim*dim)
					b.Predicted(k, &g.Values, sigma, p)
					near(t, "J Sigma J'", p, m.RawMatrix().Data, 1e-5, 1e-3+mat.Norm(&m, 2))
				}
			}
			if inv == nil {
				return
			}
			x := make([]float64, 2*sigma.Scalars())
			for k := range x {
				x[k] = r.NormFloat64()
			}
			var want mat.Dense
			want.Mul(inv, mat.NewDense(2, sigma.Scalars(), append([]float64(nil), x...)).T())
			sigma.Apply(x, 2)
			for v := range int32(n) {
				if o := sigma.Offset(v); o >= 0 {
					for c := range 2 * dim {
						at, column := o+c%dim, c/dim
						near(t, "Sigma x", []float64{x[column*sigma.Scalars()+at]}, []float64{want.At(w.offset[v]+c%dim, column)}, 1e-6, 1e-3+mat.Norm(&want, 2))
					}
				}
			}
		})
	})
}
