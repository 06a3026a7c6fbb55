package posegraph

import "selvage/internal/lie"

// linearisePlane adds all factors of a planar batch. With J the inverse right Jacobian at the residual and A = Ad((X_i^-1 X_j)^-1):
//
//	H_jj = J' Omega J,  H_ji = -H_jj A,  H_ii = A' H_jj A,  g_j = J' Omega r,  g_i = -A' g_j.
func (b *Between) linearisePlane(v *Values, a *Assembly) float64 {
	cost := 0.0
	var p planeFactor
	for k := range b.I {
		w := b.W[k]
		if w == 0 {
			continue
		}
		i, j := b.I[k], b.J[k]
		cost += w * p.evaluate(&v.Poses[i], &v.Poses[j], &b.Z[k], (*[9]float64)(b.info[9*k:]), w)
		if d := a.Diag(j); d != nil {
			add9(d, &p.hjj)
			add3(a.Grad(j), &p.gj)
		}
		if d := a.Diag(i); d != nil {
			add9(d, &p.hii)
			add3(a.Grad(i), &p.gi)
		}
		switch s := b.slots[k]; {
		case s < 0: // the block stands as rows j, columns i
			add9(a.Matrix.Off(int(-s-1)), &p.hji)
		case s > 0:
			m := a.Matrix.Off(int(s - 1))
			_ = m[8]
			m[0] += p.hji[0]
			m[1] += p.hji[3]
			m[2] += p.hji[6]
			m[3] += p.hji[1]
			m[4] += p.hji[4]
			m[5] += p.hji[7]
			m[6] += p.hji[2]
			m[7] += p.hji[5]
			m[8] += p.hji[8]
		}
	}
	return cost / 2
}

// planeFactor is the linearisation of one planar relative pose.
type planeFactor struct {
	hjj, hji, hii lie.Mat3
	gi, gj        [3]float64
}

// evaluate linearises the factor with weight w and returns r' Omega r without it.
func (p *planeFactor) evaluate(xi, xj, z *lie.SE3, o *[9]float64, w float64) float64 {
	rel := lie.Planar(xi).Between(lie.Planar(xj))
	r := lie.Planar(z).Between(rel).Log()
	J := lie.JrInv2(r)
	or0 := o[0]*r[0] + o[1]*r[1] + o[2]*r[2]
	or1 := o[3]*r[0] + o[4]*r[1] + o[5]*r[2]
	or2 := o[6]*r[0] + o[7]*r[1] + o[8]*r[2]
	chi2 := r[0]*or0 + r[1]*or1 + r[2]*or2
	or0, or1, or2 = w*or0, w*or1, w*or2
	p.gj[0] = J[0]*or0 + J[3]*or1
	p.gj[1] = J[1]*or0 + J[4]*or1
	p.gj[2] = J[2]*or0 + J[5]*or1 + or2

	m := lie.Mat3(*o).Mul(J)
	h := &p.hjj
	h[0] = w * (J[0]*m[0] + J[3]*m[3])
	h[1] = w * (J[0]*m[1] + J[3]*m[4])
	h[2] = w * (J[0]*m[2] + J[3]*m[5])
	h[4] = w * (J[1]*m[1] + J[4]*m[4])
	h[5] = w * (J[1]*m[2] + J[4]*m[5])
	h[8] = w * (J[2]*m[2] + J[5]*m[5] + m[8])
	h[3], h[6], h[7] = h[1], h[2], h[5]

	// A = Ad(rel^-1) = [[c s y'] [-s c -x'] [0 0 1]], (x', y') the translation of rel^-1.
	c, s := rel.C, rel.S
	ix := -c*rel.X - s*rel.Y
	iy := s*rel.X - c*rel.Y
	n := &p.hji
	for r := 0; r < 9; r += 3 {
		x, y, t := h[r], h[r+1], h[r+2]
		n[r] = -(x*c - y*s)
		n[r+1] = -(x*s + y*c)
		n[r+2] = -(x*iy - y*ix + t)
	}
	q := &p.hii // -A' hji
	for k := 0; k < 3; k++ {
		x, y, t := n[k], n[3+k], n[6+k]
		q[k] = -(c*x - s*y)
		q[3+k] = -(s*x + c*y)
		q[6+k] = -(iy*x - ix*y + t)
	}
	g := &p.gj
	p.gi[0] = -(c*g[0] - s*g[1])
	p.gi[1] = -(s*g[0] + c*g[1])
	p.gi[2] = -(iy*g[0] - ix*g[1] + g[2])
	return chi2
}

func add9(d []float64, h *lie.Mat3) {
	m := (*[9]float64)(d)
	for i := range m {
		m[i] += h[i]
	}
}

func add3(d []float64, g *[3]float64) {
	m := (*[3]float64)(d)
	m[0] += g[0]
	m[1] += g[1]
	m[2] += g[2]
}
