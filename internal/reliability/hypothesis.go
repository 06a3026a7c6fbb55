package reliability

import "gonum.org/v1/gonum/mat"

// Hypothesis tests whether several measurements share one error, the same few parameters times their effects C on each: that one robot
// sees a mark elsewhere than the others, say. Of Omega and r over these measurements it takes a = C' Omega C, seen = C' Omega Q_v Omega C and
// g = C' Omega r, the matrices row-major. T = g' seen^- g is chi-square with dof degrees of freedom if there is no such error; error
// is the estimate of the parameters, nil where the measurements leave some of them free. (Teunissen, 'Testing Theory', Delft 2000: the
// generalised likelihood ratio test of a linear model against one with more parameters.)
func Hypothesis(a, seen, g []float64) (t float64, dof int, estimate []float64) {
	n := len(g)
	root, back := roots(a, n)
	if root == nil {
		return 0, 0, nil
	}
	_, q := root.Dims()
	// In parameters that a sees with unit weight what is seen has eigenvalues from 0 to 1, as the redundancy of a measurement.
	var bs, m, white, along, solved mat.Dense
	bs.Mul(back.T(), mat.NewDense(n, n, seen))
	m.Mul(&bs, back)
	sym := mat.NewSymDense(q, nil)
	for i := range q {
		for j := i; j < q; j++ {
			sym.SetSym(i, j, (m.At(i, j)+m.At(j, i))/2)
		}
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(sym, true) {
		panic("reliability: a hypothesis that is not finite")
	}
	var u mat.Dense
	eigen.VectorsTo(&u)
	white.Mul(back.T(), mat.NewDense(n, 1, g))
	along.Mul(u.T(), &white)
	for k, value := range eigen.Values(nil) {
		x := along.At(k, 0)
		if value < checked {
			along.Set(k, 0, 0)
			continue
		}
		dof++
		t += x * x / value
		along.Set(k, 0, x/value)
	}
	if dof == n {
		var params mat.Dense
		solved.Mul(&u, &along)
		params.Mul(back, &solved)
		estimate = mat.Col(nil, 0, &params)
	}
	return t, dof, estimate
}
