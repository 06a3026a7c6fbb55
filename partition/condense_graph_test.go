package partition

import (
	"math"
	"math/rand/v2"

	"selvage/internal/lie"
)

// link is a relative measurement of the test graphs: z is pose to seen from pose from, omega its information, dim x dim.
type link struct {
	from, to int32
	z        lie.SE3
	omega    []float64
}

// graph is a pose graph at its present poses.
type graph struct {
	dim   int
	poses []lie.SE3
	links []link
}

// embed returns a tangent of D numbers as one of six.
func embed(xi []float64) (t lie.Tangent) {
	if len(xi) == 6 {
		copy(t[:], xi)
		return t
	}
	t[0], t[1], t[5] = xi[0], xi[1], xi[2]
	return t
}

// residual returns the logarithm of x with D numbers, and the inverse right Jacobian there.
func residual(dim int, x lie.SE3) (r, jrInv []float64) {
	if dim == 3 {
		v := lie.Planar(&x).Log()
		j := lie.JrInv2(v)
		return v[:], j[:]
	}
	v := x.Log()
	j := lie.JrInv(v)
	return v[:], j[:]
}

func adjoint(dim int, x lie.SE3) []float64 {
	if dim == 3 {
		a := lie.Planar(&x).Adjoint()
		return a[:]
	}
	a := x.Adjoint()
	return a[:]
}

// product returns a b for a of m rows.
func product(m int, a, b []float64) []float64 {
	k := len(a) / m
	n := len(b) / k
	c := make([]float64, m*n)
	for i := 0; i < m; i++ {
		for l := 0; l < k; l++ {
			for j := 0; j < n; j++ {
				c[i*n+j] += a[i*k+l] * b[l*n+j]
			}
		}
	}
	return c
}

// transpose returns the transpose of a with m rows.
func transpose(m int, a []float64) []float64 {
	n := len(a) / m
	t := make([]float64, len(a))
	for i := 0; i < m; i++ {
		for j := 0; j < n; j++ {
			t[j*m+i] = a[i*n+j]
		}
	}
	return t
}

// linearise returns J'Omega J and J'Omega r of every link.
func (g *graph) linearise() []Quadratic {
	d := g.dim
	out := make([]Quadratic, len(g.links))
	for i, l := range g.links {
		x := g.poses[l.from].Between(g.poses[l.to])
		r, jr := residual(g.dim, l.z.Between(x))
		ji := product(d, jr, adjoint(g.dim, x.Inv()))
		J := make([]float64, d*2*d)
		for a := 0; a < d; a++ {
			for b := 0; b < d; b++ {
				J[a*2*d+b] = -ji[a*d+b]
				J[a*2*d+d+b] = jr[a*d+b]
			}
		}
		JtW := product(2*d, transpose(d, J), l.omega)
		out[i] = Quadratic{[]int32{l.from, l.to}, product(2*d, JtW, J), product(2*d, JtW, r)}
	}
	return out
}

// dense returns the sum of the terms over all poses.
func dense(dim, n int, terms []Quadratic) (H, b []float64) {
	m := dim * n
	H, b = make([]float64, m*m), make([]float64, m)
	for _, t := range terms {
		k := dim * len(t.Nodes)
		at := func(i int) int { return int(t.Nodes[i/dim])*dim + i%dim }
		for i := 0; i < k; i++ {
			b[at(i)] += t.B[i]
			for j := 0; j < k; j++ {
				H[at(i)*m+at(j)] += t.H[i*k+j]
			}
		}
	}
	return H, b
}

// expand returns the cliques as terms with their references, by the Jacobian of e at e = 0.
func (g *graph) expand(c *Condensed) []Quadratic {
	d := g.dim
	var out []Quadratic
	for _, q := range c.Cliques {
		k := len(q.Nodes) - 1
		J := make([]float64, d*k*d*(k+1))
		for i := 0; i < k; i++ {
			x := g.poses[q.Nodes[0]].Between(g.poses[q.Nodes[i+1]])
			ad := adjoint(g.dim, x.Inv())
			for r := 0; r < d; r++ {
				row := J[(i*d+r)*d*(k+1):][:d*(k+1)]
				for s := 0; s < d; s++ {
					row[s] = -ad[r*d+s]
				}
				row[(i+1)*d+r] = 1
			}
		}
		Jt := transpose(d*k, J)
		out = append(out, Quadratic{q.Nodes, product(d*(k+1), product(d*(k+1), Jt, q.H), J), product(d*(k+1), Jt, q.B)})
	}
	return out
}

// schur eliminates all but the kept poses by Gauss-Jordan steps with the largest diagonal pivot: slow and plain.
func schur(dim, n int, H, b []float64, kept []int32) (S, c []float64) {
	m := dim * n
	H, b = append([]float64(nil), H...), append([]float64(nil), b...)
	open := make([]bool, m)
	for i := range open {
		open[i] = true
	}
	for _, v := range kept {
		for j := 0; j < dim; j++ {
			open[int(v)*dim+j] = false
		}
	}
	for {
		p := -1
		for i := range open {
			if open[i] && (p < 0 || H[i*m+i] > H[p*m+p]) {
				p = i
			}
		}
		if p < 0 {
			break
		}
		open[p] = false
		for i := 0; i < m; i++ {
			if i == p || H[i*m+p] == 0 {
				continue
			}
			f := H[i*m+p] / H[p*m+p]
			for j := 0; j < m; j++ {
				H[i*m+j] -= f * H[p*m+j]
			}
			b[i] -= f * b[p]
		}
	}
	k := dim * len(kept)
	S, c = make([]float64, k*k), make([]float64, k)
	at := func(i int) int { return int(kept[i/dim])*dim + i%dim }
	for i := 0; i < k; i++ {
		c[i] = b[at(i)]
		for j := 0; j < k; j++ {
			S[i*k+j] = H[at(i)*m+at(j)]
		}
	}
	return S, c
}

// apart returns the largest difference over the largest entry of want.
func apart(got, want []float64) float64 {
	if len(got) != len(want) {
		return math.Inf(1)
	}
	diff, scale := 0.0, 0.0
	for i := range want {
		diff = max(diff, math.Abs(got[i]-want[i]))
		scale = max(scale, math.Abs(want[i]))
	}
	if scale == 0 {
		return diff
	}
	return diff / scale
}

// moved returns the graph with all poses carried by t.
func (g *graph) moved(t lie.SE3) *graph {
	h := &graph{g.dim, make([]lie.SE3, len(g.poses)), g.links}
	for i := range g.poses {
		h.poses[i] = t.Mul(g.poses[i])
	}
	return h
}

func tangent(dim int, rng *rand.Rand, metres, radians float64) lie.Tangent {
	u := func(s float64) float64 { return s * (2*rng.Float64() - 1) }
	if dim == 3 {
		return lie.Tangent{u(metres), u(metres), 0, 0, 0, u(radians)}
	}
	return lie.Tangent{u(metres), u(metres), u(metres), u(radians), u(radians), u(radians)}
}

// walk returns a chain of n poses in each of the given parts with closures random links within the parts, noisy and not at an
// optimum, with full information matrices.
func walk(dim int, parts []int, closures int, rng *rand.Rand) *graph {
	g := &graph{dim: dim}
	measure := func(i, j int) {
		z := g.poses[i].Between(g.poses[j]).Plus(tangent(dim, rng, .05, .02))
		g.links = append(g.links, link{int32(i), int32(j), z, information(g.dim, rng)})
	}
	first := 0
	for _, k := range parts {
		x := lie.Exp(tangent(dim, rng, 10, 1))
		for i := 0; i < k; i++ {
			g.poses = append(g.poses, x)
			x = x.Mul(lie.Exp(tangent(dim, rng, 1, .5)))
			if i > 0 {
				measure(first+i-1, first+i)
			}
		}
		for c := 0; c < closures && k > 1; c++ {
			i, j := rng.IntN(k), rng.IntN(k)
			if i != j {
				measure(first+i, first+j)
			}
		}
		first += k
	}
	return g
}

// information returns a random positive definite matrix of condition about 1e3, in the units of sigmas of .05 m and .01 rad.
func information(d int, rng *rand.Rand) []float64 {
	a := make([]float64, d*d)
	for i := range a {
		a[i] = .3 * rng.NormFloat64()
	}
	for i := 0; i < d; i++ {
		a[i*d+i] += 1
	}
	for i := 0; i < d; i++ {
		s := 20.0
		if i >= d/2 && d == 6 || d == 3 && i == 2 {
			s = 100
		}
		for j := 0; j < d; j++ {
			a[j*d+i] *= s
		}
	}
	return product(d, transpose(d, a), a)
}
