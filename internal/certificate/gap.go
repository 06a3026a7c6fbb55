package certificate

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/mat"
)

// The search for the gap: vectors iterated together, most rounds, and the relative change with which it has settled.
const (
	together = 4
	rounds   = 40
	settled  = 1e-5
)

// gap returns the smallest eigenvalue of S beside those of the gauge, from above: by inverse iteration of a few vectors
// that are kept free of the gauge (Parlett, 'The Symmetric Eigenvalue Problem', 1980). S + tol I has been factorised.
func (s *dual) gap(goOn func() bool) float64 {
	n := len(s.component) * s.width
	free := len(s.component)*(1+s.m) - s.parts*len(s.gauge)
	if free <= 0 {
		return math.Inf(1)
	}
	k := min(together, free)
	random := rand.New(rand.NewPCG(1, 2))
	v, image := make([]float64, k*n), make([]float64, k*n)
	for i := range v {
		v[i] = random.NormFloat64()
	}
	s.orthonormalise(v, k, n)
	last := math.Inf(1)
	for range rounds {
		if !goOn() {
			break
		}
		s.factor.SolveMany(v, k)
		s.orthonormalise(v, k, n)
		small := mat.NewSymDense(k, nil)
		for a := range k {
			s.matrix.Mul(v[a*n:(a+1)*n], image[a*n:(a+1)*n])
			for b := range a + 1 {
				small.SetSym(b, a, inner(v[b*n:(b+1)*n], image[a*n:(a+1)*n]))
			}
		}
		var eigen mat.EigenSym
		if !eigen.Factorize(small, false) {
			return math.NaN()
		}
		now := eigen.Values(nil)[0] - s.tol
		if math.Abs(now-last) <= settled*math.Abs(now) {
			return now
		}
		last = now
	}
	return last
}

// orthonormalise frees k vectors of the gauge and of each other.
func (s *dual) orthonormalise(v []float64, k, n int) {
	for a := range k {
		x := v[a*n : (a+1)*n]
		for range 2 { // the second time for what rounding left
			s.clean(x)
			for b := range a {
				y := v[b*n : (b+1)*n]
				along := inner(x, y)
				for i := range x {
					x[i] -= along * y[i]
				}
			}
			size := math.Sqrt(inner(x, x))
			for i := range x {
				x[i] /= size
			}
		}
	}
}

func inner(x, y []float64) float64 {
	sum := 0.0
	for i := range x {
		sum += x[i] * y[i]
	}
	return sum
}
