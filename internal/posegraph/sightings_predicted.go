package posegraph

import (
	"math"

	"selvage/internal/lie"
)

// Predicted returns J Sigma J' of sighting k at v: the covariance with which the variables predict its residual, whether or not it is
// part of the solution. Components that are not measured are zero.
func (s *Sightings) Predicted(k int, v *Values, sigma Covariance) (p lie.Mat3) {
	var li, lj [18]float64
	_, a := s.evaluate(k, s.seen(k, v), true)
	di, dj := s.spreads(k, v, &li, &lj)
	add := func(x *[18]float64, dx int, m []float64, y *[18]float64, dy int) { // A x m y' A'
		var xm [18]float64
		for r := range 3 {
			for c := range dy {
				for i := range dx {
					xm[r*dy+c] += x[r*dx+i] * m[i*dy+c]
				}
			}
		}
		var q lie.Mat3
		for r := range 3 {
			for c := range 3 {
				for i := range dy {
					q[3*r+c] += xm[r*dy+i] * y[c*dy+i]
				}
			}
		}
		q = a.Mul(q).Mul(a.T())
		for i := range p {
			p[i] += q[i]
		}
	}
	if m := sigma.Of(s.From[k]); m != nil {
		add(&li, di, m, &li, di)
	}
	if m := sigma.Of(s.target(k)); m != nil {
		add(&lj, dj, m, &lj, dj)
	}
	var cross, back [36]float64
	if slot := s.slots[k]; slot != 0 {
		sigma.block(slot, di, dj, cross[:])
		for r := range di {
			for c := range dj {
				back[c*di+r] = cross[r*dj+c]
			}
		}
		add(&li, di, cross[:], &lj, dj)
		add(&lj, dj, back[:], &li, di)
	}
	return p
}

// Jacobians writes the derivatives of the residual of sighting k at v by the tangent of pose From, 3 x Dim row-major, and by that of
// what is seen, 3 x Dim for a robot and 3 x 3 for a point. Rows of what is not measured are zero.
func (s *Sightings) Jacobians(k int, v *Values, ji, jj []float64) {
	var li, lj [18]float64
	_, a := s.evaluate(k, s.seen(k, v), true)
	di, dj := s.spreads(k, v, &li, &lj)
	for r := range 3 {
		for c := range di {
			ji[r*di+c] = a[3*r]*li[c] + a[3*r+1]*li[di+c] + a[3*r+2]*li[2*di+c]
		}
		for c := range dj {
			jj[r*dj+c] = a[3*r]*lj[c] + a[3*r+1]*lj[dj+c] + a[3*r+2]*lj[2*dj+c]
		}
	}
}

// Innovation returns r' (J Sigma J' + C)^-1 r of sighting k, C its own covariance: how far it lies from what the others predict,
// chi-square with as many degrees of freedom as it measures when it is true. It must not be part of the solution (weight zero).
func (s *Sightings) Innovation(k int, v *Values, sigma Covariance) float64 {
	p, r := s.Predicted(k, v, sigma), s.Residual(k, v)
	var at []int
	for i := range 3 {
		if s.info[k][4*i] > 0 {
			at = append(at, i)
		}
	}
	n := len(at)
	var m, e [9]float64
	own := invert(&s.info[k], at)
	for i, a := range at {
		e[i] = r[a]
		for j, b := range at {
			m[i*n+j] = p[3*a+b] + own[i*n+j]
		}
	}
	return inverseForm(m[:n*n], e[:n])
}

// invert returns the inverse of the given rows and columns of a positive definite matrix, by Gauss and Jordan.
func invert(m *lie.Mat3, at []int) (out [9]float64) {
	n := len(at)
	var a [9]float64
	for i, p := range at {
		out[i*n+i] = 1
		for j, q := range at {
			a[i*n+j] = m[3*p+q]
		}
	}
	for c := range n {
		f := a[c*n+c]
		for j := range n {
			a[c*n+j] /= f
			out[c*n+j] /= f
		}
		for r := range n {
			if r == c {
				continue
			}
			f := a[r*n+c]
			for j := range n {
				a[r*n+j] -= f * a[c*n+j]
				out[r*n+j] -= f * out[c*n+j]
			}
		}
	}
	return out
}

// block writes the cross covariance of the pair that owns a slot, rows of its first variable and columns of its second.
func (c Covariance) block(slot Slot, rows, columns int, dst []float64) {
	if slot > 0 {
		copy(dst, c.m.Off(int(slot - 1))[:rows*columns])
		return
	}
	m := c.m.Off(int(-slot - 1))
	for i := range rows {
		for j := range columns {
			dst[i*columns+j] = m[j*rows+i]
		}
	}
}

// Spread returns the standard deviation of the place that sighting k should have seen, in metres.
func (s *Sightings) Spread(k int, v *Values, sigma Covariance) float64 {
	one := *s
	one.sense = Position
	p := one.Predicted(k, v, sigma)
	return math.Sqrt(p[0] + p[4] + p[8])
}
