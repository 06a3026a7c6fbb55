package posegraph

import "selvage/internal/lie"

// MarkCliques is a batch of condensed factors over poses and points: [Cliques] with residuals of points beside those of poses,
//
//	e_p = R_k0'(p - t_k0) - Rbar_k0'(pbar - tbar_k0),
//
// so that it does not care either where the frame of its robot stands in the datum.
type MarkCliques struct {
	g    *Graph
	list []markClique
}

type markClique struct {
	poses  []int32 // the first is the reference
	points []int32
	rel    []lie.SE3 // Xbar_k0^-1 Xbar_k for the poses after the reference
	seen   [][3]float64
	h, b   []float64 // over the residuals
	slots  []Slot    // of all pairs, row by row of the upper triangle
	e, v   []float64 // residuals; H e + b
	j, k   []float64 // de/dX of each node but the reference, width x width; de/dX_k0, width x Dim
	hk     []float64 // H k
	t, u   []float64
}

// AddMarkCliques appends an empty batch of condensed factors with points to g and returns it.
func (g *Graph) AddMarkCliques() *MarkCliques {
	c := &MarkCliques{g: g}
	g.Sets = append(g.Sets, c)
	return c
}

// Add appends a condensed factor: its poses, the first being the reference, and points; where these were when it was linearised; and
// its matrix (square, symmetric) and vector over their tangents there without the reference, Dim rows for a pose, then 3 for a point.
func (c *MarkCliques) Add(poses []int32, at []lie.SE3, points []int32, places [][3]float64, h, b []float64) {
	dim := c.g.Dim
	m := dim * (len(poses) - 1)
	n := m + 3*len(points)
	if len(poses) < 1 || len(poses)+len(points) < 2 || len(at) != len(poses) || len(places) != len(points) || len(h) != n*n || len(b) != n {
		panic("posegraph: clique of wrong shape")
	}
	q := markClique{poses: poses, points: points, h: make([]float64, n*n), b: make([]float64, n)}
	for _, x := range at[1:] {
		q.rel = append(q.rel, at[0].Between(x))
	}
	for _, p := range places {
		q.seen = append(q.seen, toFrame(&at[0], p))
	}
	// The tangent of a point is that of the frame; its residual is turned into the reference: H <- T' H T with T = Rbar_k0 there.
	t := make([]float64, n*n)
	for i := range n {
		if i < m {
			t[i*(n+1)] = 1
			continue
		}
		o := m + (i-m)/3*3
		copy(t[i*n+o:i*n+o+3], at[0].R[3*((i-m)%3):])
	}
	ht := make([]float64, n*n)
	product(ht, h, n, n, t, n, false)
	product(q.h, t, n, n, ht, n, true)
	product(q.b, t, n, n, b, 1, true)
	q.e, q.v = make([]float64, n), make([]float64, n)
	q.j, q.k, q.hk = make([]float64, n*dim), make([]float64, n*dim), make([]float64, n*dim)
	q.t, q.u = make([]float64, dim*dim), make([]float64, dim*dim)
	c.list = append(c.list, q)
}

// product writes a b to c; a has r rows and s columns, b q columns. With transposed it is a' b.
func product(c, a []float64, r, s int, b []float64, q int, transposed bool) {
	rows, inner := r, s
	if transposed {
		rows, inner = s, r
	}
	for i := range rows {
		for j := range q {
			sum := 0.0
			for k := range inner {
				if transposed {
					sum += a[k*s+i] * b[k*q+j]
				} else {
					sum += a[i*s+k] * b[k*q+j]
				}
			}
			c[i*q+j] = sum
		}
	}
}

// Len returns the number of cliques.
func (c *MarkCliques) Len() int { return len(c.list) }

// variable returns that of node k, and its width.
func (c *MarkCliques) variable(q *markClique, k int) (int32, int) {
	if k < len(q.poses) {
		return q.poses[k], c.g.Dim
	}
	return c.g.Point(q.points[k-len(q.poses)]), 3
}

// Couplings implements [FactorSet].
func (c *MarkCliques) Couplings(emit func(i, j int32)) {
	for i := range c.list {
		q := &c.list[i]
		n := len(q.poses) + len(q.points)
		for a := range n {
			for b := a + 1; b < n; b++ {
				i, _ := c.variable(q, a)
				j, _ := c.variable(q, b)
				emit(i, j)
			}
		}
	}
}

// Bind implements [FactorSet].
func (c *MarkCliques) Bind(next func() Slot) {
	for i := range c.list {
		n := len(c.list[i].poses) + len(c.list[i].points)
		c.list[i].slots = make([]Slot, n*(n-1)/2)
		for s := range c.list[i].slots {
			c.list[i].slots[s] = next()
		}
	}
}

// residual fills e and v = H e + b of q and returns the cost.
func (q *markClique) residual(dim int, v *Values) float64 {
	x0 := &v.Poses[q.poses[0]]
	for k := range q.rel {
		p := x0.Between(v.Poses[q.poses[k+1]])
		r := q.rel[k].Between(p)
		t := r.Log()
		if dim == 3 {
			q.e[3*k], q.e[3*k+1], q.e[3*k+2] = t[0], t[1], t[5]
		} else {
			copy(q.e[6*k:], t[:])
		}
	}
	o := dim * len(q.rel)
	for k, p := range q.points {
		d := minus(toFrame(x0, v.Points[p]), q.seen[k])
		copy(q.e[o+3*k:], d[:])
	}
	cost := 0.0
	n := len(q.e)
	for i, e := range q.e {
		sum := 0.0
		for j, x := range q.e {
			sum += q.h[i*n+j] * x
		}
		cost += e * (sum/2 + q.b[i])
		q.v[i] = sum + q.b[i]
	}
	return cost
}

// Cost implements [FactorSet].
func (c *MarkCliques) Cost(v *Values) float64 {
	sum := 0.0
	for k := range c.list {
		sum += c.list[k].residual(c.g.Dim, v)
	}
	return sum
}

// derive fills j and k of q.
func (q *markClique) derive(dim int, v *Values) {
	x0 := &v.Poses[q.poses[0]]
	for k := range q.rel {
		p := v.Poses[q.poses[k+1]].Between(*x0)
		jk, kk := q.j[k*dim*dim:(k+1)*dim*dim], q.k[k*dim*dim:(k+1)*dim*dim]
		if dim == 3 {
			jr := lie.JrInv2([3]float64(q.e[3*k : 3*k+3]))
			ad := lie.Planar(&p).Adjoint()
			copy(jk, jr[:])
			product(kk, jk, 3, 3, ad[:], 3, false)
		} else {
			jr := lie.JrInv(lie.Tangent(q.e[6*k : 6*k+6]))
			ad := p.Adjoint()
			copy(jk, jr[:])
			product(kk, jk, 6, 6, ad[:], 6, false)
		}
		for i := range kk {
			kk[i] = -kk[i]
		}
	}
	o := dim * dim * len(q.rel)
	rt := x0.R.T()
	for k, p := range q.points {
		copy(q.j[o+9*k:], rt[:])
		var l [18]float64
		spread(&l, dim, &lie.Mat3{-1, 0, 0, 0, -1, 0, 0, 0, -1}, toFrame(x0, v.Points[p]))
		copy(q.k[o+3*dim*k:], l[:3*dim])
	}
}

// Linearise implements [FactorSet].
func (c *MarkCliques) Linearise(v *Values, a *Assembly) float64 {
	sum := 0.0
	for i := range c.list {
		q := &c.list[i]
		sum += q.residual(c.g.Dim, v)
		q.derive(c.g.Dim, v)
		c.add(q, a)
	}
	return sum
}

// add enters a clique: H_kl = J_k' H J_l, H_0l = (H K)_l' J_l, H_00 = K' H K, g_k = J_k' v_k, g_0 = K' v.
func (c *MarkCliques) add(q *markClique, a *Assembly) {
	dim, n := c.g.Dim, len(q.b)
	nodes := len(q.poses) + len(q.points)
	product(q.hk, q.h, n, n, q.k, dim, false)
	if d := a.Diag(q.poses[0]); d != nil {
		product(q.t, q.k, n, dim, q.hk, dim, true)
		accumulate(d, q.t)
		product(q.t, q.k, n, dim, q.v, 1, true)
		accumulate(a.Grad(q.poses[0])[:dim], q.t)
	}
	for r, k, at := 0, 1, 0; k < nodes; k++ {
		variable, w := c.variable(q, k)
		j := q.j[at : at+w*w]
		product(q.t, q.hk[r*dim:], w, dim, j, w, true)
		addOff(a, q.slots[pair(0, k, nodes)], q.t, dim, w)
		if g := a.Grad(variable); g != nil {
			product(q.t, j, w, w, q.v[r:], 1, true)
			accumulate(g[:w], q.t)
			for s, l, to := r, k, at; l < nodes; l++ {
				_, x := c.variable(q, l)
				for i := range w { // H_kl J_l
					for m := range x {
						sum := 0.0
						for o := range x {
							sum += q.h[(r+i)*n+s+o] * q.j[to+o*x+m]
						}
						q.u[i*x+m] = sum
					}
				}
				product(q.t, j, w, w, q.u, x, true)
				if l == k {
					accumulate(a.Diag(variable), q.t)
				} else {
					addOff(a, q.slots[pair(k, l, nodes)], q.t, w, x)
				}
				s, to = s+x, to+x*x
			}
		}
		r, at = r+w, at+w*w
	}
}

// Joint returns the joint covariance of the poses of clique k, (Dim times their number)^2 row-major.
func (c *MarkCliques) Joint(k int, sigma Covariance) []float64 {
	q, d := &c.list[k], c.g.Dim
	all := len(q.poses) + len(q.points)
	n := d * len(q.poses)
	out := make([]float64, n*n)
	var block [36]float64
	for a, v := range q.poses {
		if m := sigma.Of(v); m != nil {
			put(out, n, d*a, d*a, m, d)
		}
		for b := a + 1; b < len(q.poses); b++ {
			sigma.Across(q.slots[pair(a, b, all)], block[:])
			put(out, n, d*a, d*b, block[:], d)
			for i := range d {
				for j := range d {
					out[(d*b+j)*n+d*a+i] = block[i*d+j]
				}
			}
		}
	}
	return out
}
