package posegraph

import "selvage/internal/lie"

// lineariseSpace adds all factors of a spatial batch; formulas as in linearisePlane.
func (b *Between) lineariseSpace(v *Values, a *Assembly) float64 {
	cost := 0.0
	var p spaceFactor
	for k := range b.I {
		w := b.W[k]
		if w == 0 {
			continue
		}
		i, j := b.I[k], b.J[k]
		cost += w * p.evaluate(&v.Poses[i], &v.Poses[j], &b.Z[k], (*[36]float64)(b.info[36*k:]), w)
		if d := a.Diag(j); d != nil {
			m := (*[36]float64)(d)
			addBlock(m, 0, &p.hjj[0])
			addBlock(m, 3, &p.hjj[1])
			addTransposed(m, 18, &p.hjj[1])
			addBlock(m, 21, &p.hjj[2])
			add6(a.Grad(j), &p.gj)
		}
		if d := a.Diag(i); d != nil {
			m := (*[36]float64)(d)
			addBlock(m, 0, &p.hii[0])
			addBlock(m, 3, &p.hii[1])
			addTransposed(m, 18, &p.hii[1])
			addBlock(m, 21, &p.hii[2])
			add6(a.Grad(i), &p.gi)
		}
		switch s := b.slots[k]; {
		case s < 0:
			m := (*[36]float64)(a.Matrix.Off(int(-s - 1)))
			addBlock(m, 0, &p.hji[0])
			addBlock(m, 3, &p.hji[1])
			addBlock(m, 18, &p.hji[2])
			addBlock(m, 21, &p.hji[3])
		case s > 0:
			m := (*[36]float64)(a.Matrix.Off(int(s - 1)))
			addTransposed(m, 0, &p.hji[0])
			addTransposed(m, 18, &p.hji[1])
			addTransposed(m, 3, &p.hji[2])
			addTransposed(m, 21, &p.hji[3])
		}
	}
	return cost / 2
}

// spaceFactor is the linearisation of one spatial relative pose, in 3 x 3 blocks: [0 1; 1' 2] of the symmetric ones,
// [0 1; 2 3] of hji.
type spaceFactor struct {
	hjj, hii [3]lie.Mat3
	hji      [4]lie.Mat3
	gi, gj   [6]float64
}

// evaluate linearises the factor with weight w and returns r' Omega r without it.
func (p *spaceFactor) evaluate(xi, xj, z *lie.SE3, o *[36]float64, w float64) float64 {
	var rel, e lie.SE3
	between(&rel, xi, xj)
	between(&e, z, &rel)
	r := e.Log()
	var A, Q lie.Mat3
	lie.JrInvBlocks(&r, &A, &Q)

	var or [6]float64
	chi2 := 0.0
	for i := range or {
		q := o[6*i : 6*i+6 : 6*i+6]
		or[i] = q[0]*r[0] + q[1]*r[1] + q[2]*r[2] + q[3]*r[3] + q[4]*r[4] + q[5]*r[5]
		chi2 += r[i] * or[i]
		or[i] *= w
	}
	for i := 0; i < 3; i++ { // J' = [[A' 0] [Q' A']]
		p.gj[i] = A[i]*or[0] + A[3+i]*or[1] + A[6+i]*or[2]
		p.gj[3+i] = Q[i]*or[0] + Q[3+i]*or[1] + Q[6+i]*or[2] + A[i]*or[3] + A[3+i]*or[4] + A[6+i]*or[5]
	}

	var o11, o12, o22 lie.Mat3
	for i := 0; i < 3; i++ {
		for j := 0; j < 3; j++ {
			o11[3*i+j] = w * o[6*i+j]
			o12[3*i+j] = w * o[6*i+3+j]
			o22[3*i+j] = w * o[6*i+21+j]
		}
	}
	// M = Omega J = [[o11 A, o11 Q + o12 A] [o12' A, o12' Q + o22 A]]; the lower left block is not needed.
	var m11, m12, m22 lie.Mat3
	mulSet(&m11, &o11, &A)
	mulSet(&m12, &o11, &Q)
	mulAdd(&m12, &o12, &A)
	mulTSet(&m22, &o12, &Q)
	mulAdd(&m22, &o22, &A)
	h := &p.hjj
	mulTSet(&h[0], &A, &m11)
	mulTSet(&h[1], &A, &m12)
	mulTSet(&h[2], &Q, &m12)
	mulTAdd(&h[2], &A, &m22)

	// -Ad(rel^-1) = [[-R' R'S] [0 -R']], S = Skew(t) of rel.
	var n, s lie.Mat3
	R, t := &rel.R, &rel.T
	for i := 0; i < 3; i++ {
		for j := 0; j < 3; j++ {
			n[3*i+j] = -R[3*j+i]
		}
		// row i of R' times Skew(t)
		a, b, c := R[i], R[3+i], R[6+i]
		s[3*i], s[3*i+1], s[3*i+2] = b*t[2]-c*t[1], c*t[0]-a*t[2], a*t[1]-b*t[0]
	}
	var h21 lie.Mat3
	transpose(&h21, &h[1])
	q := &p.hji // hjj times that
	mulSet(&q[0], &h[0], &n)
	mulSet(&q[1], &h[0], &s)
	mulAdd(&q[1], &h[1], &n)
	mulSet(&q[2], &h21, &n)
	mulSet(&q[3], &h21, &s)
	mulAdd(&q[3], &h[2], &n)
	u := &p.hii // that transposed times hji
	mulTSet(&u[0], &n, &q[0])
	mulTSet(&u[1], &n, &q[1])
	mulTSet(&u[2], &s, &q[1])
	mulTAdd(&u[2], &n, &q[3])
	g := &p.gj
	for i := 0; i < 3; i++ {
		p.gi[i] = n[i]*g[0] + n[3+i]*g[1] + n[6+i]*g[2]
		p.gi[3+i] = s[i]*g[0] + s[3+i]*g[1] + s[6+i]*g[2] + n[i]*g[3] + n[3+i]*g[4] + n[6+i]*g[5]
	}
	return chi2
}

// between writes x^-1 y to p.
func between(p, x, y *lie.SE3) {
	mulTSet(&p.R, &x.R, &y.R)
	a, b, c := y.T[0]-x.T[0], y.T[1]-x.T[1], y.T[2]-x.T[2]
	p.T[0] = x.R[0]*a + x.R[3]*b + x.R[6]*c
	p.T[1] = x.R[1]*a + x.R[4]*b + x.R[7]*c
	p.T[2] = x.R[2]*a + x.R[5]*b + x.R[8]*c
}

// addBlock adds h to the 3 x 3 block of the 6 x 6 matrix m that starts at entry o.
func addBlock(m *[36]float64, o int, h *lie.Mat3) {
	d := (*[15]float64)(m[o:])
	d[0] += h[0]
	d[1] += h[1]
	d[2] += h[2]
	d[6] += h[3]
	d[7] += h[4]
	d[8] += h[5]
	d[12] += h[6]
	d[13] += h[7]
	d[14] += h[8]
}

// addTransposed adds h' to that block.
func addTransposed(m *[36]float64, o int, h *lie.Mat3) {
	d := (*[15]float64)(m[o:])
	d[0] += h[0]
	d[1] += h[3]
	d[2] += h[6]
	d[6] += h[1]
	d[7] += h[4]
	d[8] += h[7]
	d[12] += h[2]
	d[13] += h[5]
	d[14] += h[8]
}

func add6(d []float64, g *[6]float64) {
	m := (*[6]float64)(d)
	for i := range m {
		m[i] += g[i]
	}
}

// mulSet writes a b to c, mulAdd adds it; mulTSet and mulTAdd take a transposed.
func mulSet(c, a, b *lie.Mat3) {
	for i := 0; i < 9; i += 3 {
		x, y, z := a[i], a[i+1], a[i+2]
		c[i] = x*b[0] + y*b[3] + z*b[6]
		c[i+1] = x*b[1] + y*b[4] + z*b[7]
		c[i+2] = x*b[2] + y*b[5] + z*b[8]
	}
}

func mulAdd(c, a, b *lie.Mat3) {
	for i := 0; i < 9; i += 3 {
		x, y, z := a[i], a[i+1], a[i+2]
		c[i] += x*b[0] + y*b[3] + z*b[6]
		c[i+1] += x*b[1] + y*b[4] + z*b[7]
		c[i+2] += x*b[2] + y*b[5] + z*b[8]
	}
}

func mulTSet(c, a, b *lie.Mat3) {
	for i := 0; i < 3; i++ {
		x, y, z := a[i], a[i+3], a[i+6]
		c[3*i] = x*b[0] + y*b[3] + z*b[6]
		c[3*i+1] = x*b[1] + y*b[4] + z*b[7]
		c[3*i+2] = x*b[2] + y*b[5] + z*b[8]
	}
}

func mulTAdd(c, a, b *lie.Mat3) {
	for i := 0; i < 3; i++ {
		x, y, z := a[i], a[i+3], a[i+6]
		c[3*i] += x*b[0] + y*b[3] + z*b[6]
		c[3*i+1] += x*b[1] + y*b[4] + z*b[7]
		c[3*i+2] += x*b[2] + y*b[5] + z*b[8]
	}
}

func transpose(c, a *lie.Mat3) {
	c[0], c[1], c[2] = a[0], a[3], a[6]
	c[3], c[4], c[5] = a[1], a[4], a[7]
	c[6], c[7], c[8] = a[2], a[5], a[8]
}
