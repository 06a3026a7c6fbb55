package certificate

import (
	"selvage/internal/lie"
	"selvage/internal/posegraph"
)

// surrogate is half the cost of the package comment, as a batch of factors.
type surrogate struct {
	plane      bool
	i, j       []int32
	z          []lie.SE3
	kappa, tau []float64
	slots      []posegraph.Slot
}

// newSurrogate takes the measurements that count. What does not measure all of a translation, or of a rotation, says nothing of it here.
func newSurrogate(b *posegraph.Between, dim int) *surrogate {
	c := &surrogate{plane: dim == 3}
	for k := range b.I {
		if b.W[k] == 0 {
			continue
		}
		o := b.Info(k)
		var kappa, tau float64
		if c.plane {
			kappa = o[8] / 2
			if det := o[0]*o[4] - o[1]*o[3]; det > singular*o[0]*o[4] {
				tau = 2 * det / (o[0] + o[4])
			}
		} else {
			tau = 3 * stiffness(o, 0)
			kappa = 1.5 * stiffness(o, 3)
		}
		c.i, c.j, c.z = append(c.i, b.I[k]), append(c.j, b.J[k]), append(c.z, b.Z[k])
		c.kappa, c.tau = append(c.kappa, b.W[k]*kappa), append(c.tau, b.W[k]*tau)
	}
	return c
}

// singular is the determinant of a block, over the product of its diagonal, below which some direction of it was not measured.
const singular = 1e-12

// stiffness returns 1 / tr A^-1 of the 3 x 3 block A of a 6 x 6 matrix that begins at row and column first, 0 for a singular one.
func stiffness(o []float64, first int) float64 {
	at := func(r, c int) float64 { return o[6*(first+r)+first+c] }
	minor := func(a, b int) float64 { return at(a, a)*at(b, b) - at(a, b)*at(a, b) }
	m0, m1, m2 := minor(1, 2), minor(0, 2), minor(0, 1)
	det := at(0, 0)*m0 - at(0, 1)*(at(0, 1)*at(2, 2)-at(1, 2)*at(0, 2)) + at(0, 2)*(at(0, 1)*at(1, 2)-at(1, 1)*at(0, 2))
	if !(det > singular*at(0, 0)*at(1, 1)*at(2, 2)) {
		return 0
	}
	return det / (m0 + m1 + m2)
}

// Couplings implements [posegraph.FactorSet].
func (c *surrogate) Couplings(emit func(i, j int32)) {
	for k := range c.i {
		emit(c.i[k], c.j[k])
	}
}

// Bind implements [posegraph.FactorSet].
func (c *surrogate) Bind(next func() posegraph.Slot) {
	c.slots = make([]posegraph.Slot, len(c.i))
	for k := range c.slots {
		c.slots[k] = next()
	}
}

// apart returns the relative pose of a factor, how far its translation lies from the measured one, and its rotation after the measured one:
// |R_j - R_i R_ij|^2 = |E - I|^2 = 2 tr (I - E).
func (c *surrogate) apart(k int, v *posegraph.Values) (rel lie.SE3, t [3]float64, e lie.Mat3) {
	rel = v.Poses[c.i[k]].Between(v.Poses[c.j[k]])
	for n := range t {
		t[n] = rel.T[n] - c.z[k].T[n]
	}
	return rel, t, c.z[k].R.T().Mul(rel.R)
}

// half returns half the cost of a factor.
func (c *surrogate) half(k int, t *[3]float64, e *lie.Mat3) float64 {
	// 1 - cos of the angle from the quaternion: the trace would lose half the digits of small ones.
	q := lie.QuatOf(e)
	turn := 4 * (q[0]*q[0] + q[1]*q[1] + q[2]*q[2])
	return c.kappa[k]*turn + c.tau[k]*(t[0]*t[0]+t[1]*t[1]+t[2]*t[2])/2
}

// Cost implements [posegraph.FactorSet].
func (c *surrogate) Cost(v *posegraph.Values) float64 {
	sum := 0.0
	for k := range c.i {
		_, t, e := c.apart(k, v)
		sum += c.half(k, &t, &e)
	}
	return sum
}

// Linearise implements [posegraph.FactorSet]. Under right perturbations the relative pose P moves as P Exp(d_j) and Exp(-d_i) P. The
// rotation's part of the Gauss-Newton matrix is 2 kappa I for d_j, and its gradient 2 kappa sin(angle) times the axis of E.
func (c *surrogate) Linearise(v *posegraph.Values, a *posegraph.Assembly) float64 {
	sum := 0.0
	for k := range c.i {
		rel, t, e := c.apart(k, v)
		sum += c.half(k, &t, &e)
		kappa, tau := c.kappa[k], c.tau[k]
		var ji, jj, gi, gj [36]float64 // derivatives of (t, turn), and their product with the weights
		arm := lie.Skew(rel.T)
		for r := range 3 {
			ji[7*r] = -1
			for q := range 3 {
				ji[6*r+3+q] = arm[3*r+q]
				jj[6*r+q] = rel.R[3*r+q]
				ji[6*(3+r)+3+q] = -rel.R[3*q+r] // the turn of i, seen from j
			}
			jj[7*(3+r)] = 1
		}
		for r := range 6 {
			w := tau
			if r > 2 {
				w = 2 * kappa
			}
			for q := range 6 {
				gi[6*r+q], gj[6*r+q] = w*ji[6*r+q], w*jj[6*r+q]
			}
		}
		res := [6]float64{t[0], t[1], t[2], (e[7] - e[5]) / 2, (e[2] - e[6]) / 2, (e[3] - e[1]) / 2}
		c.add(a, c.i[k], &ji, &gi, &res)
		c.add(a, c.j[k], &jj, &gj, &res)
		switch s := c.slots[k]; {
		case s > 0:
			c.product(a.Matrix.Off(int(s-1)), &ji, &gj)
		case s < 0:
			c.product(a.Matrix.Off(int(-s-1)), &jj, &gi)
		}
	}
	return sum
}

// add adds J'WJ and J'Wr of one end.
func (c *surrogate) add(a *posegraph.Assembly, variable int32, j, weighted *[36]float64, r *[6]float64) {
	h := a.Diag(variable)
	if h == nil {
		return
	}
	c.product(h, j, weighted)
	g := a.Grad(variable)
	for n, col := range c.components() {
		for row := range r {
			g[n] += weighted[6*row+col] * r[row]
		}
	}
}

// product adds J'(WK).
func (c *surrogate) product(h []float64, j, weighted *[36]float64) {
	all := c.components()
	for n, p := range all {
		for m, q := range all {
			sum := 0.0
			for row := range 6 {
				sum += j[6*row+p] * weighted[6*row+q]
			}
			h[n*len(all)+m] += sum
		}
	}
}

var inSpace, inPlane = []int{0, 1, 2, 3, 4, 5}, []int{0, 1, 5}

// components are those of a tangent.
func (c *surrogate) components() []int {
	if c.plane {
		return inPlane
	}
	return inSpace
}
