package reliability

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// An error of all components of one measurement is the hypothesis of its own test: the same statistic, and the estimate is how far it lies
// from what all others predict. The correlation of two single residuals is that of the rows of Q_v.
func TestHypothesisOfOneMeasurement(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	for range 20 {
		const d = 2
		n := randomNet(r, 8, d, 5)
		v, _, q := n.adjust(nil, nil)
		f := n.figures(v, q, 4, d, nil)
		_, cols := n.a.Dims()
		rows := n.a.Slice(4, 4+d, 0, cols)
		var aq, p mat.Dense
		aq.Mul(rows, q)
		p.Mul(&aq, rows.T())
		a, seen, g := make([]float64, d*d), make([]float64, d*d), make([]float64, d)
		for i := range d {
			wi := 1 / (n.sigma[4+i] * n.sigma[4+i])
			a[i*d+i], g[i] = wi, wi*v[4+i]
			for j := range d {
				wj := 1 / (n.sigma[4+j] * n.sigma[4+j])
				seen[i*d+j] = a[i*d+j] - wi*p.At(i, j)*wj
			}
		}
		stat, dof, estimate := Hypothesis(a, seen, g)
		if dof != f.DoF || dof != d {
			t.Fatalf("%d degrees of freedom, want %d", dof, f.DoF)
		}
		near(t, "T", stat, f.T, 1e-8*f.T)
		for i := range d {
			near(t, "estimate", estimate[i], f.Apart[i], 1e-7*math.Abs(f.Apart[i])+1e-12)
		}

		var all, aqa mat.Dense
		all.Mul(n.a, q)
		aqa.Mul(&all, n.a.T())
		one := func(i int) (float64, []float64) {
			w := 1 / (n.sigma[i] * n.sigma[i])
			parts, _, _ := Parts([]float64{w}, []float64{aqa.At(i, i)})
			return n.sigma[i]*n.sigma[i] - aqa.At(i, i), parts
		}
		q0, f0 := one(0)
		q7, f7 := one(7)
		got := Correlation([]float64{f0[0] * aqa.At(0, 7) * f7[0]}, 1, 1)
		near(t, "correlation", got, math.Abs(aqa.At(0, 7))/math.Sqrt(q0*q7), 1e-9)
	}
}
