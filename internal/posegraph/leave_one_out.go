package posegraph

import (
	"math"

	"selvage/internal/lie"
)

// LeaveOneOut returns how far sighting k lies from what all other measurements predict, at a solution v of which it is part with its
// present weight and sigma is the covariance: chi-square with the given degrees of freedom when it is true. Directions in which
// nothing else predicts it do not count; where these are all, freedoms is 0. Loose is the largest variance predicted without it, over its
// own: +Inf where there is none in some direction. To first order this is what solving without it would give, see [Sightings.Innovation].
//
// With Omega = M M', let l be an eigenvalue of M' J Sigma J' M and r the component of M' times the residual. Without the sighting,
// of weight w, the variance predicted is l / (1 - w l) and the residual r / (1 - w l): r^2 / ((1 - w l) (1 - w l + l)).
func (s *Sightings) LeaveOneOut(k int, v *Values, sigma Covariance) (statistic float64, freedoms int, loose float64) {
	const alone = 1e-6 // share of an error that the others see, below which they say nothing
	m := root(&s.info[k])
	predicted := m.T().Mul(s.Predicted(k, v, sigma)).Mul(m)
	r := m.T().Apply(s.Residual(k, v))
	values, vectors := eigen3(&predicted)
	freedoms = s.Freedoms(k)
	for c, l := range values {
		left := 1 - s.W[k]*l
		if left < alone {
			freedoms--
			loose = math.Inf(1)
			continue
		}
		e := vectors[c]*r[0] + vectors[3+c]*r[1] + vectors[6+c]*r[2]
		statistic += e * e / (left * (left + l))
		loose = math.Max(loose, l/left)
	}
	return statistic, freedoms, loose
}

// root returns the lower triangular M with M M' = a, positive semidefinite; columns of pivots that vanish are zero.
func root(a *lie.Mat3) (m lie.Mat3) {
	for c := range 3 {
		d := a[4*c]
		for i := range c {
			d -= m[3*c+i] * m[3*c+i]
		}
		if !(d > 1e-12*a[4*c]) {
			continue
		}
		m[4*c] = math.Sqrt(d)
		for r := c + 1; r < 3; r++ {
			x := a[3*r+c]
			for i := range c {
				x -= m[3*r+i] * m[3*c+i]
			}
			m[3*r+c] = x / m[4*c]
		}
	}
	return m
}

// eigen3 returns the eigenvalues of a symmetric matrix and its eigenvectors as columns, by cyclic Jacobi rotations.
func eigen3(a *lie.Mat3) (values [3]float64, v lie.Mat3) {
	m := *a
	v = lie.Mat3{1, 0, 0, 0, 1, 0, 0, 0, 1}
	for range 12 {
		off := m[1]*m[1] + m[2]*m[2] + m[5]*m[5]
		if !(off > 1e-32*(m[0]*m[0]+m[4]*m[4]+m[8]*m[8])) {
			break
		}
		for _, at := range [3][2]int{{0, 1}, {0, 2}, {1, 2}} {
			p, q := at[0], at[1]
			if m[3*p+q] == 0 {
				continue
			}
			half := (m[4*q] - m[4*p]) / (2 * m[3*p+q])
			t := 1 / (math.Abs(half) + math.Sqrt(half*half+1))
			if half < 0 {
				t = -t
			}
			c := 1 / math.Sqrt(t*t+1)
			s := t * c
			for i := range 3 {
				x, y := m[3*i+p], m[3*i+q]
				m[3*i+p], m[3*i+q] = c*x-s*y, s*x+c*y
			}
			for i := range 3 {
				x, y := m[3*p+i], m[3*q+i]
				m[3*p+i], m[3*q+i] = c*x-s*y, s*x+c*y
				x, y = v[3*i+p], v[3*i+q]
				v[3*i+p], v[3*i+q] = c*x-s*y, s*x+c*y
			}
		}
	}
	return [3]float64{m[0], m[4], m[8]}, v
}
