package reliability

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// checked is the smallest redundancy that counts as a check. What rounding makes of zero stays well below it: the redundancy is the
// difference of two covariances that agree to some 1e-9.
const checked = 1e-6

// Figures are what an adjustment says about one of its measurements. Vectors are by component; figures of a test that nothing
// checks are NaN.
type Figures struct {
	Redundancy []float64 // diagonal of Q_v Omega: the share of an error that shows in the residual
	DoF        int       // of the test: directions that anything checks
	T          float64   // r' Q_v^- r, chi-square with DoF degrees of freedom if the measurement is sound
	W          []float64 // normalised residuals (Omega r)_c / sqrt(M_cc), M = Omega Q_v Omega
	Detectable []float64 // smallest error along the component that its test finds with [Power]: Delta / sqrt(M_cc)
	Effect     []float64 // most that such an error moves any adjusted quantity, in standard deviations of that quantity
	Apart      []float64 // how far the measurement lies from what all others predict (leave-one-out): R^-1 r
}

// Total returns the sum of the redundancies.
func (f *Figures) Total() float64 {
	sum := 0.0
	for _, r := range f.Redundancy {
		sum += r
	}
	return sum
}

// Assess computes the figures of a measurement with residual r, information omega and predicted covariance p of its residual
// (J Q J', the measurement being part of the adjustment), both row-major. Omega may be singular: what it does not weigh
// was not measured.
//
// All is done on the whitened residual s = G' r, Omega = G G', whose covariance is the redundancy matrix R = I - G' P G with
// eigenvalues from 0 (nothing checks this direction) to 1 (only this measurement is in doubt).
func Assess(r, omega, p []float64) Figures {
	m := len(r)
	f := Figures{
		Redundancy: make([]float64, m), W: make([]float64, m), Detectable: make([]float64, m),
		Effect: make([]float64, m), Apart: make([]float64, m),
	}
	for c := range m {
		f.W[c], f.Detectable[c], f.Effect[c], f.Apart[c] = math.NaN(), math.NaN(), math.NaN(), math.NaN()
	}
	g, back := roots(omega, m)
	if g == nil {
		return f
	}
	_, q := g.Dims()
	red := redundancy(g, mat.NewDense(m, m, p))
	var eigen mat.EigenSym
	if !eigen.Factorize(red, true) {
		panic("reliability: a redundancy matrix that is not finite")
	}
	var u, white, along, solved mat.Dense
	eigen.VectorsTo(&u)
	white.Mul(g.T(), mat.NewDense(m, 1, r))
	along.Mul(u.T(), &white)
	for k, value := range eigen.Values(nil) {
		x := along.At(k, 0)
		if value < checked {
			along.Set(k, 0, 0)
			continue
		}
		f.DoF++
		f.T += x * x / value
		along.Set(k, 0, x/value)
	}
	if f.DoF == q {
		var apart mat.Dense
		solved.Mul(&u, &along)
		apart.Mul(back, &solved)
		mat.Col(f.Apart, 0, &apart)
	}
	var gr, weighted mat.Dense // G R, Omega r
	gr.Mul(g, red)
	weighted.Mul(g, &white)
	for c := range m {
		row := g.RawRowView(c)
		f.Redundancy[c] = dot(back.RawRowView(c), gr.RawRowView(c)) // of G^-T R G'
		weight, seen := dot(row, row), dot(row, gr.RawRowView(c))   // Omega_cc, M_cc
		if !(weight > 0) || seen < checked*weight {
			continue
		}
		f.W[c] = weighted.At(c, 0) / math.Sqrt(seen)
		f.Detectable[c] = Delta / math.Sqrt(seen)
		f.Effect[c] = f.Detectable[c] * math.Sqrt(max(0, weight-seen)) // (Omega P Omega)_cc = Omega_cc - M_cc
	}
	return f
}

// redundancy returns I - G' P G.
func redundancy(g, p *mat.Dense) *mat.SymDense {
	_, q := g.Dims()
	var pg, predicted mat.Dense
	pg.Mul(p, g)
	predicted.Mul(g.T(), &pg)
	red := mat.NewSymDense(q, nil)
	for i := range q {
		for j := i; j < q; j++ {
			x := -(predicted.At(i, j) + predicted.At(j, i)) / 2
			if i == j {
				x++
			}
			red.SetSym(i, j, x)
		}
	}
	return red
}

// roots returns G with G G' = omega, one column for each direction that was measured, and its inverse B: B' G = I. Both are nil
// where nothing was measured. The matrix is scaled to unit diagonal first: metres and radians may differ by any factor.
func roots(omega []float64, m int) (g, back *mat.Dense) {
	scale := make([]float64, m)
	s := mat.NewSymDense(m, nil)
	for i := range m {
		if d := omega[i*m+i]; d > 0 {
			scale[i] = math.Sqrt(d)
		}
	}
	for i := range m {
		for j := i; j < m; j++ {
			if scale[i] > 0 && scale[j] > 0 {
				s.SetSym(i, j, omega[i*m+j]/scale[i]/scale[j])
			}
		}
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(s, true) {
		panic("reliability: an information matrix that is not finite")
	}
	var u mat.Dense
	eigen.VectorsTo(&u)
	values := eigen.Values(nil)
	first := 0
	for first < m && values[first] < 1e-12 {
		first++
	}
	if first == m {
		return nil, nil
	}
	g, back = mat.NewDense(m, m-first, nil), mat.NewDense(m, m-first, nil)
	for k := first; k < m; k++ {
		for i := range m {
			if scale[i] > 0 {
				g.Set(i, k-first, scale[i]*u.At(i, k)*math.Sqrt(values[k]))
				back.Set(i, k-first, u.At(i, k)/math.Sqrt(values[k])/scale[i])
			}
		}
	}
	return g, back
}

func dot(a, b []float64) float64 {
	sum := 0.0
	for i, x := range a {
		sum += x * b[i]
	}
	return sum
}

// Judge tests a measurement that is not part of the adjustment against what the adjustment predicts: with residual r, information
// omega and predicted covariance p of the residual it returns r' (P + Omega^-1)^-1 r over what was measured, chi-square with dof
// degrees of freedom if the measurement is sound.
func Judge(r, omega, p []float64) (t float64, dof int) {
	m := len(r)
	g, _ := roots(omega, m)
	if g == nil {
		return 0, 0
	}
	_, q := g.Dims()
	sum := redundancy(g, mat.NewDense(m, m, p)) // I - G' P G, of which I + G' P G is 2 I minus it
	for i := range q {
		for j := i; j < q; j++ {
			x := -sum.At(i, j)
			if i == j {
				x += 2
			}
			sum.SetSym(i, j, x)
		}
	}
	var white, solved mat.Dense
	white.Mul(g.T(), mat.NewDense(m, 1, r))
	var chol mat.Cholesky
	if !chol.Factorize(sum) {
		panic("reliability: a predicted covariance that is not positive semidefinite")
	}
	if err := chol.SolveTo(&solved, &white); err != nil {
		panic("reliability: " + err.Error()) // eigenvalues are 1 or more
	}
	return mat.Dot(white.ColView(0), solved.ColView(0)), q
}
