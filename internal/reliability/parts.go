package reliability

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// Parts takes the residual of a measurement, given its information omega and its predicted covariance p, into as many independent parts of
// unit variance as anything checks: f' r, f being m x dof row-major. H is the matrix with f = omega h. Dof may be 0.
//
// The parts n, k of two measurements have the covariance -f_n' J_n Q J_k' f_k, whose entries squared and summed over the lesser dof are the
// square of what [Correlation] returns.
func Parts(omega, p []float64) (f, h []float64, dof int) {
	m := int(math.Sqrt(float64(len(omega))))
	g, back := roots(omega, m)
	if g == nil {
		return nil, nil, 0
	}
	_, q := g.Dims()
	var eigen mat.EigenSym
	if !eigen.Factorize(redundancy(g, mat.NewDense(m, m, p)), true) {
		panic("reliability: a redundancy matrix that is not finite")
	}
	var u mat.Dense
	eigen.VectorsTo(&u)
	values := eigen.Values(nil)
	first := 0
	for first < q && values[first] < checked {
		first++
	}
	if first == q {
		return nil, nil, 0
	}
	kept := mat.DenseCopyOf(u.Slice(0, q, first, q))
	for c := range q - first {
		for r := range q {
			kept.Set(r, c, kept.At(r, c)/math.Sqrt(values[first+c]))
		}
	}
	var fm, hm mat.Dense
	fm.Mul(g, kept)
	hm.Mul(back, kept)
	return fm.RawMatrix().Data, hm.RawMatrix().Data, q - first
}

// Correlation is that of the tests of two measurements whose parts have the given covariance, n x k: the root mean square of their
// canonical correlations, over the test with fewer degrees of freedom. It is 1 where whatever error the one with fewer shows, the other
// shows as well; for measurements of one component each it is the correlation of their normalised residuals (Förstner, 'Reliability and
// Discernability of Extended Gauss-Markov Models', DGK A 98, 1983).
func Correlation(covariance []float64, n, k int) float64 {
	sum := 0.0
	for _, x := range covariance {
		sum += x * x
	}
	return math.Sqrt(sum / float64(min(n, k)))
}
