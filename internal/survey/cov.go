package survey

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// Cov is the uncertainty of a pose as people think of it.
type Cov struct {
	// Sigma holds the standard deviations of x, y, z, rx, ry, rz in m and rad;
	// +Inf for a component that was not measured.
	Sigma [6]float64

	// Corr is the upper triangle of the correlation matrix without its
	// diagonal, row by row: x_y, x_z, x_rx, x_ry, x_rz, y_z ... ry_rz.
	Corr [15]float64
}

// componentNames are the tangent components in order.
var componentNames = [6]string{"x", "y", "z", "rx", "ry", "rz"}

// Uncorrelated returns the covariance with sigma t for each translation and
// sigma r for each rotation component.
func Uncorrelated(t, r float64) Cov {
	return Cov{Sigma: [6]float64{t, t, t, r, r, r}}
}

var (
	errNotPSD   = errors.New("not positive semidefinite")
	errSingular = errors.New("singular")
)

// inDim reports whether tangent component i exists in a survey of dimension dim.
func inDim(i, dim int) bool { return dim == 3 || i == 0 || i == 1 || i == 5 }

// Information returns the inverse of the covariance over the measured
// components, 6x6 row-major and symmetric in the tangent order; rows and
// columns of components that were not measured are zero, in dimension 2 also
// those of z, rx and ry, whatever c says about them.
//
// It fails when a sigma is not positive, a correlation lies outside [-1, 1] or
// involves a component that was not measured, or the correlation matrix is not
// positive definite.
func (c Cov) Information(dim int) ([36]float64, error) {
	var info [36]float64
	if dim != 2 && dim != 3 {
		return info, fmt.Errorf("survey: dimension %d, expected 2 or 3", dim)
	}
	var m block
	for i, s := range c.Sigma {
		switch {
		case !inDim(i, dim):
		case math.IsInf(s, 1):
		case s >= minSigma && s <= maxSigma:
			m.use(i)
		default:
			return info, fmt.Errorf("survey: sigma of %s is %g, expected %g to %g or inf", componentNames[i], s, minSigma, maxSigma)
		}
	}
	k := 0
	for i := range 6 {
		for j := i + 1; j < 6; j++ {
			r := c.Corr[k]
			k++
			if r == 0 || !inDim(i, dim) || !inDim(j, dim) {
				continue
			}
			if !(math.Abs(r) <= 1) {
				return info, fmt.Errorf("survey: correlation of %s and %s is %g, expected -1 to 1", componentNames[i], componentNames[j], r)
			}
			if m.pos[i] == 0 || m.pos[j] == 0 {
				return info, fmt.Errorf("survey: correlation of %s and %s is %g, expected 0 for a component that was not measured", componentNames[i], componentNames[j], r)
			}
			m.set(i, j, r)
		}
	}
	inv, err := m.inverse()
	if err != nil {
		return info, fmt.Errorf("survey: correlation matrix: %w", err)
	}
	for a := range m.n {
		i := m.idx[a]
		for b := range m.n {
			j := m.idx[b]
			info[6*i+j] = inv[a][b] / c.Sigma[i] / c.Sigma[j]
			if b < a {
				info[6*i+j] = info[6*j+i]
			}
		}
	}
	return info, nil
}

// CovFromInformation returns the covariance of a 6x6 row-major information
// matrix in the tangent order, of which it reads the upper triangle. A zero row
// becomes an infinite sigma, and in dimension 2 those of z, rx and ry do
// whatever they hold.
//
// The matrix is scaled to unit diagonal before it is inverted, so different
// units and weights of the components cost no accuracy: what counts is the
// condition number of the scaled matrix, and Information recovers m to about
// that number times 1e-16, relative to the diagonal.
func CovFromInformation(m [36]float64, dim int) (Cov, error) {
	var c Cov
	if dim != 2 && dim != 3 {
		return c, fmt.Errorf("survey: dimension %d, expected 2 or 3", dim)
	}
	var a block
	var scale [6]float64 // 1/sqrt of the diagonal
	for i := range 6 {
		c.Sigma[i] = math.Inf(1)
		d := m[7*i]
		switch {
		case !inDim(i, dim) || d == 0:
		case d > 0 && !math.IsInf(d, 1):
			a.use(i)
			scale[i] = 1 / math.Sqrt(d)
		default:
			return Cov{}, fmt.Errorf("survey: information of %s, %s is %g, not a finite number from 0", componentNames[i], componentNames[i], d)
		}
	}
	for i := range 6 {
		for j := i + 1; j < 6; j++ {
			v := m[6*i+j]
			if v == 0 || !inDim(i, dim) || !inDim(j, dim) {
				continue
			}
			if a.pos[i] == 0 || a.pos[j] == 0 {
				return Cov{}, fmt.Errorf("survey: information of %s, %s is %g beside a zero on the diagonal", componentNames[i], componentNames[j], v)
			}
			a.set(i, j, v*scale[i]*scale[j])
		}
	}
	inv, err := a.inverse()
	if err != nil {
		return Cov{}, fmt.Errorf("survey: %w", err)
	}
	for p := range a.n {
		i := a.idx[p]
		c.Sigma[i] = math.Sqrt(inv[p][p]) * scale[i]
		if !(c.Sigma[i] >= minSigma && c.Sigma[i] <= maxSigma) {
			return Cov{}, fmt.Errorf("survey: sigma of %s is %g, not from %g to %g", componentNames[i], c.Sigma[i], minSigma, maxSigma)
		}
	}
	k := 0
	for i := range 6 {
		for j := i + 1; j < 6; j++ {
			if p, q := a.pos[i], a.pos[j]; p > 0 && q > 0 {
				r := inv[p-1][q-1] / math.Sqrt(inv[p-1][p-1]*inv[q-1][q-1])
				c.Corr[k] = max(-1, min(1, r))
			}
			k++
		}
	}
	if err := c.checkCorrelation(); err != nil { // too close to singular to come back
		return Cov{}, fmt.Errorf("survey: inverse: %w", err)
	}
	return c, nil
}

// checkCorrelation returns an error when the correlation matrix of the measured
// components is not positive definite. Sigmas and correlations are within range.
func (c *Cov) checkCorrelation() error {
	var m block
	for i, s := range c.Sigma {
		if !math.IsInf(s, 1) {
			m.use(i)
		}
	}
	k := 0
	for i := range 6 {
		for j := i + 1; j < 6; j++ {
			if c.Corr[k] != 0 {
				m.set(i, j, c.Corr[k])
			}
			k++
		}
	}
	var l [6][6]float64
	if !m.cholesky(&l) {
		return fmt.Errorf("a correlation matrix that is %w", m.diagnose())
	}
	return nil
}

// block is a symmetric matrix with unit diagonal over those of the six
// components that are in use.
type block struct {
	n   int
	idx [6]int // component of each row
	pos [6]int // row of each component, plus one
	a   [6][6]float64
}

func (m *block) use(component int) {
	m.idx[m.n] = component
	m.a[m.n][m.n] = 1
	m.n++
	m.pos[component] = m.n
}

func (m *block) set(i, j int, v float64) {
	p, q := m.pos[i]-1, m.pos[j]-1
	m.a[p][q], m.a[q][p] = v, v
}

// minPivot is the smallest square of a Cholesky pivot of a unit-diagonal matrix
// that is taken for more than rounding, which reaches some 1e-15. An inverse
// with a pivot of this size still has three true digits.
const minPivot = 1e-13

// cholesky computes the lower factor l of the block and reports whether the
// block is positive definite.
func (m *block) cholesky(l *[6][6]float64) bool {
	for j := range m.n {
		d := m.a[j][j]
		for k := range j {
			d -= l[j][k] * l[j][k]
		}
		if !(d > minPivot) {
			return false
		}
		l[j][j] = math.Sqrt(d)
		for i := j + 1; i < m.n; i++ {
			s := m.a[i][j]
			for k := range j {
				s -= l[i][k] * l[j][k]
			}
			l[i][j] = s / l[j][j]
		}
	}
	return true
}

// inverse inverts the block. A block that is not positive definite gives
// errNotPSD or errSingular, with the eigenvalues.
func (m *block) inverse() (inv [6][6]float64, err error) {
	n := m.n
	var l, li [6][6]float64
	if !m.cholesky(&l) {
		return inv, m.diagnose()
	}
	// li is the inverse of l, and inv = li' li.
	for j := range n {
		li[j][j] = 1 / l[j][j]
		for i := j + 1; i < n; i++ {
			s := 0.0
			for k := j; k < i; k++ {
				s -= l[i][k] * li[k][j]
			}
			li[i][j] = s / l[i][i]
		}
	}
	for i := range n {
		for j := i; j < n; j++ {
			s := 0.0
			for k := j; k < n; k++ {
				s += li[k][i] * li[k][j]
			}
			inv[i][j], inv[j][i] = s, s
		}
	}
	return inv, nil
}

// diagnose says in what way the block is not positive definite.
func (m *block) diagnose() error {
	sym := mat.NewSymDense(m.n, nil)
	for i := range m.n {
		for j := i; j < m.n; j++ {
			sym.SetSym(i, j, m.a[i][j])
		}
	}
	lo, hi := extremeEigenvalues(sym)
	if lo < -psdTol*hi {
		return fmt.Errorf("%w (smallest eigenvalue %.3g, largest %.3g)", errNotPSD, lo, hi)
	}
	return fmt.Errorf("%w (smallest eigenvalue %.3g, largest %.3g)", errSingular, lo, hi)
}

// extremeEigenvalues returns the smallest and the largest eigenvalue of a, NaN
// when the iteration fails.
func extremeEigenvalues(a mat.Symmetric) (lo, hi float64) {
	var eig mat.EigenSym
	if !eig.Factorize(a, false) {
		return math.NaN(), math.NaN()
	}
	v := eig.Values(nil)
	return v[0], v[len(v)-1]
}
