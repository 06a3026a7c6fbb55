package posegraph

import "selvage/internal/lie"

// Cliques is a batch of condensed factors. A clique over the poses k0 (its reference) and k1..km has the residuals
//
//	e_k = Log((Xbar_k0^-1 Xbar_k)^-1 X_k0^-1 X_k)
//
// and the cost 1/2 e' H e + b' e, e stacked over k1..km: it sees poses only through X_k0^-1 X_k, so it does not care where the
// frame of its robot stands in the datum. At Xbar it has the gradient and the Gauss-Newton matrix of what was condensed.
type Cliques struct {
	dim  int
	list []clique
	work cliqueWork
}

type clique struct {
	nodes []int32
	rel   []lie.SE3 // Xbar_k0^-1 Xbar_k for k1..km
	h, b  []float64
	slots []Slot // of all pairs, row by row of the upper triangle
}

// cliqueWork is scratch that the largest clique fits in.
type cliqueWork struct {
	e, v []float64 // residuals; H e + b
	j, k []float64 // de_k/dX_k and de_k/dX_k0, dim x dim each, one after another
	hk   []float64 // H times k
	t    [36]float64
}

// AddCliques appends an empty batch of condensed factors to g and returns it.
func (g *Graph) AddCliques() *Cliques {
	c := &Cliques{dim: g.Dim}
	g.Sets = append(g.Sets, c)
	return c
}

// Add appends a condensed factor: nodes (the first is the reference), the poses of the nodes where it was linearised, and its
// matrix H (d x d, symmetric) and vector b without the reference, d = Dim (len(nodes) - 1). The slices are kept.
func (c *Cliques) Add(nodes []int32, at []lie.SE3, h, b []float64) {
	d := c.dim * (len(nodes) - 1)
	if len(nodes) < 2 || len(at) != len(nodes) || len(h) != d*d || len(b) != d {
		panic("posegraph: clique of wrong shape")
	}
	rel := make([]lie.SE3, len(nodes)-1)
	for k := range rel {
		rel[k] = at[0].Between(at[k+1])
	}
	c.list = append(c.list, clique{nodes: nodes, rel: rel, h: h, b: b})
	if d > len(c.work.e) {
		c.work.e, c.work.v = make([]float64, d), make([]float64, d)
		c.work.j, c.work.k, c.work.hk = make([]float64, d*c.dim), make([]float64, d*c.dim), make([]float64, d*c.dim)
	}
}

// Len returns the number of cliques.
func (c *Cliques) Len() int { return len(c.list) }

// Couplings implements [FactorSet].
func (c *Cliques) Couplings(emit func(i, j int32)) {
	for k := range c.list {
		nodes := c.list[k].nodes
		for a, i := range nodes {
			for _, j := range nodes[a+1:] {
				emit(i, j)
			}
		}
	}
}

// Bind implements [FactorSet].
func (c *Cliques) Bind(next func() Slot) {
	for k := range c.list {
		m := len(c.list[k].nodes)
		c.list[k].slots = make([]Slot, m*(m-1)/2)
		for s := range c.list[k].slots {
			c.list[k].slots[s] = next()
		}
	}
}

// residual fills the stacked residuals e of q, and v = H e + b; it returns the cost.
func (c *Cliques) residual(q *clique, v *Values) float64 {
	d := c.dim
	e := c.work.e[:len(q.b)]
	x0 := &v.Poses[q.nodes[0]]
	for k := range q.rel {
		p := x0.Between(v.Poses[q.nodes[k+1]])
		r := q.rel[k].Between(p)
		t := r.Log()
		if d == 3 {
			e[3*k], e[3*k+1], e[3*k+2] = t[0], t[1], t[5]
		} else {
			copy(e[6*k:], t[:])
		}
	}
	cost := 0.0
	for i := range e {
		row := q.h[i*len(e) : (i+1)*len(e)]
		sum := 0.0
		for j, x := range e {
			sum += row[j] * x
		}
		cost += e[i] * (sum/2 + q.b[i])
		c.work.v[i] = sum + q.b[i]
	}
	return cost
}

// Cost implements [FactorSet].
func (c *Cliques) Cost(v *Values) float64 {
	sum := 0.0
	for k := range c.list {
		sum += c.residual(&c.list[k], v)
	}
	return sum
}

// Linearise implements [FactorSet].
func (c *Cliques) Linearise(v *Values, a *Assembly) float64 {
	sum := 0.0
	for k := range c.list {
		sum += c.linearise(&c.list[k], v, a)
	}
	return sum
}

// linearise adds one clique. With J_k = Jr^-1(e_k), K_k = -J_k Ad((X_k0^-1 X_k)^-1) and S = H K (K stacked):
//
//	H_kl = J_k' H J_l,  H_0l = S_l' J_l,  H_00 = K' S,  g_k = J_k' v_k,  g_0 = sum_k K_k' v_k.
func (c *Cliques) linearise(q *clique, v *Values, a *Assembly) float64 {
	cost := c.residual(q, v)
	d, m := c.dim, len(q.rel)
	dd := d * d
	x0 := &v.Poses[q.nodes[0]]
	for k := 0; k < m; k++ {
		p := v.Poses[q.nodes[k+1]].Between(*x0)
		jk, kk := c.work.j[k*dd:(k+1)*dd], c.work.k[k*dd:(k+1)*dd]
		if d == 3 {
			jr := lie.JrInv2([3]float64(c.work.e[3*k : 3*k+3]))
			ad := lie.Planar(&p).Adjoint()
			copy(jk, jr[:])
			multiplyRows(kk, jk, d, ad[:], d)
		} else {
			jr := lie.JrInv(lie.Tangent(c.work.e[6*k : 6*k+6]))
			ad := p.Adjoint()
			copy(jk, jr[:])
			multiplyRows(kk, jk, d, ad[:], d)
		}
		for i := range kk {
			kk[i] = -kk[i]
		}
	}
	n := d * m
	h00, g0 := a.Diag(q.nodes[0]), a.Grad(q.nodes[0])
	multiplyRows(c.work.hk[:n*d], q.h, n, c.work.k[:n*d], d)
	for k := 0; k < m; k++ {
		jk, kk, sk := c.work.j[k*dd:(k+1)*dd], c.work.k[k*dd:(k+1)*dd], c.work.hk[k*dd:(k+1)*dd]
		vk := c.work.v[d*k : d*k+d]
		if g0 != nil {
			addTv(g0, kk, vk, d)
			addTm(h00, kk, sk, d)
		}
		addSlot(a, q.slots[pair(0, k+1, m+1)], sk, jk, d)
		g := a.Grad(q.nodes[k+1])
		if g == nil {
			continue
		}
		addTv(g, jk, vk, d)
		t := c.work.t[:dd] // H_lk J_k
		for l := k; l < m; l++ {
			slot := Slot(0)
			if l > k {
				if slot = q.slots[pair(k+1, l+1, m+1)]; slot == 0 {
					continue
				}
			}
			multiplyRows(t, q.h[d*l*n+d*k:], n, jk, d)
			if l == k {
				addTm(a.Diag(q.nodes[k+1]), jk, t, d)
			} else {
				addSlot(a, slot, t, c.work.j[l*dd:(l+1)*dd], d)
			}
		}
	}
	return cost
}

// pair numbers the pair a < b of m nodes row by row.
func pair(a, b, m int) int { return a*(2*m-a-1)/2 + b - a - 1 }

// multiplyRows writes a b to c; b and c have d columns, the rows of a are ld apart and as long as b has rows.
func multiplyRows(c, a []float64, ld int, b []float64, d int) {
	rows, inner := len(c)/d, len(b)/d
	for i := 0; i < rows; i++ {
		row := a[i*ld : i*ld+inner]
		if d == 3 {
			var x, y, z float64
			for k, v := range row {
				r := (*[3]float64)(b[3*k:])
				x += v * r[0]
				y += v * r[1]
				z += v * r[2]
			}
			out := (*[3]float64)(c[3*i:])
			out[0], out[1], out[2] = x, y, z
			continue
		}
		var x, y, z, u, v, w float64
		for k, f := range row {
			r := (*[6]float64)(b[6*k:])
			x += f * r[0]
			y += f * r[1]
			z += f * r[2]
			u += f * r[3]
			v += f * r[4]
			w += f * r[5]
		}
		out := (*[6]float64)(c[6*i:])
		out[0], out[1], out[2], out[3], out[4], out[5] = x, y, z, u, v, w
	}
}

// addTv adds a' v to g.
func addTv(g, a, v []float64, d int) {
	for i := 0; i < d; i++ {
		sum := 0.0
		for k := 0; k < d; k++ {
			sum += a[k*d+i] * v[k]
		}
		g[i] += sum
	}
}

// addTm adds a' b to c, all d x d.
func addTm(c, a, b []float64, d int) {
	if d == 3 {
		m, x, y := (*lie.Mat3)(c), (*lie.Mat3)(a), (*lie.Mat3)(b)
		mulTAdd(m, x, y)
		return
	}
	for i := 0; i < 6; i++ {
		var x, y, z, u, v, w float64
		for k := 0; k < 6; k++ {
			f := a[k*6+i]
			r := (*[6]float64)(b[6*k:])
			x += f * r[0]
			y += f * r[1]
			z += f * r[2]
			u += f * r[3]
			v += f * r[4]
			w += f * r[5]
		}
		out := (*[6]float64)(c[6*i:])
		out[0] += x
		out[1] += y
		out[2] += z
		out[3] += u
		out[4] += v
		out[5] += w
	}
}

// addSlot adds a' b to the off-diagonal block of a slot.
func addSlot(s *Assembly, slot Slot, a, b []float64, d int) {
	if slot > 0 {
		addTm(s.Matrix.Off(int(slot-1)), a, b, d)
		return
	}
	if slot < 0 {
		addTm(s.Matrix.Off(int(-slot-1)), b, a, d)
	}
}

// Joint returns the joint covariance of the nodes of clique k, (dim len(nodes))^2 row-major.
func (c *Cliques) Joint(k int, sigma Covariance) []float64 {
	q, d := &c.list[k], c.dim
	m := len(q.nodes)
	n := d * m
	out := make([]float64, n*n)
	var block [36]float64
	for a := 0; a < m; a++ {
		copy(block[:], sigma.Of(q.nodes[a]))
		if sigma.Of(q.nodes[a]) == nil {
			block = [36]float64{}
		}
		put(out, n, d*a, d*a, block[:], d)
		for b := a + 1; b < m; b++ {
			sigma.Across(q.slots[pair(a, b, m)], block[:])
			put(out, n, d*a, d*b, block[:], d)
			for i := 0; i < d; i++ {
				for j := 0; j < d; j++ {
					out[(d*b+j)*n+d*a+i] = block[i*d+j]
				}
			}
		}
	}
	return out
}

func put(m []float64, n, row, col int, block []float64, d int) {
	for i := 0; i < d; i++ {
		copy(m[(row+i)*n+col:], block[i*d:i*d+d])
	}
}
