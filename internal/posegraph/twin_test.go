package posegraph

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// The tests compare with a dense twin: every matrix written out in full, Jacobians by central differences of the residual, systems
// solved by gonum.

// components are those of a tangent that a pose of the dimension has.
func components(dim int) []int {
	if dim == 3 {
		return planar[:]
	}
	return []int{0, 1, 2, 3, 4, 5}
}

func tangent(r *rand.Rand, dim int, metres, radians float64) (t lie.Tangent) {
	for _, c := range components(dim) {
		scale := metres
		if c > 2 {
			scale = radians
		}
		t[c] = scale * (2*r.Float64() - 1)
	}
	return t
}

// turned is a motion with the given angle about a random axis.
func turned(r *rand.Rand, dim int, metres, angle float64) lie.SE3 {
	t := tangent(r, dim, metres, 1)
	n := math.Sqrt(t[3]*t[3] + t[4]*t[4] + t[5]*t[5])
	for i := 3; i < 6; i++ {
		t[i] *= angle / n
	}
	return lie.Exp(t)
}

func plus(x lie.SE3, component int, h float64) lie.SE3 {
	var d lie.Tangent
	d[component] = h
	return x.Mul(lie.Exp(d))
}

// information is a random positive definite 6 x 6 matrix with full correlations.
func information(r *rand.Rand) (info [36]float64) {
	copy(info[:], positive(r, 6))
	return info
}

func positive(r *rand.Rand, n int) []float64 {
	a := make([]float64, n*n)
	for i := range a {
		a[i] = r.NormFloat64()
	}
	m := make([]float64, n*n)
	for i := range n {
		for j := range n {
			for k := range n {
				m[i*n+j] += a[i*n+k] * a[j*n+k]
			}
		}
		m[i*n+i] += 0.5
	}
	return m
}

// sample is a random connected graph near its optimum: relative poses in two batches, both ways round, some measured twice, some
// with weight zero or not one; and cliques when wanted.
func sample(r *rand.Rand, dim, n int, noise float64, cliques bool) *Graph {
	truth := make([]lie.SE3, n)
	start := make([]lie.SE3, n)
	for i := range truth {
		truth[i] = turned(r, dim, 10, 3.1*r.Float64())
		start[i] = truth[i].Plus(tangent(r, dim, noise, noise))
	}
	g := New(dim, start)
	a, b := g.AddBetween(), g.AddBetween()
	order := r.Perm(n)
	add := func(set *Between, i, j int, w float64) {
		z := truth[i].Between(truth[j]).Plus(tangent(r, dim, noise, noise))
		info := information(r)
		set.Add(int32(i), int32(j), z, &info)
		set.W[set.Len()-1] = w
	}
	for k := 1; k < n; k++ {
		i, j := order[r.IntN(k)], order[k]
		if r.IntN(2) == 0 {
			i, j = j, i
		}
		add(a, i, j, 1)
	}
	for range n {
		if n < 2 {
			break
		}
		i, j := r.IntN(n), r.IntN(n)
		if i == j {
			continue
		}
		add([]*Between{a, b}[r.IntN(2)], i, j, []float64{0, 0.3, 1, 2}[r.IntN(4)])
	}
	if cliques && n > 1 {
		addCliques(r, g, truth, noise)
	}
	return g
}

func addCliques(r *rand.Rand, g *Graph, at []lie.SE3, noise float64) *Cliques {
	c := g.AddCliques()
	for range 1 + r.IntN(3) {
		m := 2 + r.IntN(min(4, len(at)-1))
		nodes := make([]int32, m)
		bar := make([]lie.SE3, m)
		for k, v := range r.Perm(len(at))[:m] {
			nodes[k] = int32(v)
			bar[k] = at[v].Plus(tangent(r, g.Dim, noise, noise))
		}
		d := g.Dim * (m - 1)
		b := make([]float64, d)
		for i := range b {
			b[i] = noise * r.NormFloat64()
		}
		c.Add(nodes, bar, positive(r, d), b)
	}
	return c
}

// fixSome holds one variable and perhaps more.
func fixSome(r *rand.Rand, n int) []int32 {
	fixed := []int32{int32(r.IntN(n))}
	for v := range n {
		if r.IntN(5) == 0 {
			fixed = append(fixed, int32(v))
		}
	}
	return fixed
}

// dense is the linear system over the free variables in ascending order.
type dense struct {
	offset []int // variable -> first scalar, -1 when fixed
	size   int
	h      *mat.SymDense // nil when nothing is free
	g      []float64
	cost   float64
}

// twin builds the system of g at its values, factor by factor, from residuals alone.
func twin(g *Graph, fixed []int32) dense {
	n := len(g.Values.Poses)
	t := dense{offset: make([]int, n)}
	for _, f := range fixed {
		t.offset[f] = -1
	}
	for v := range t.offset {
		if t.offset[v] == 0 {
			t.offset[v] = t.size
			t.size += g.Dim
		}
	}
	t.g = make([]float64, t.size)
	full := make([]float64, t.size*t.size)
	for _, set := range g.Sets {
		switch s := set.(type) {
		case *Between:
			for k := range s.I {
				t.add(g, full, []int32{s.I[k], s.J[k]}, s.Info(k), nil, s.W[k], func(v *Values) []float64 {
					x := s.Residual(k, v)
					return pick(g.Dim, &x)
				})
			}
		case *Cliques:
			for k := range s.list {
				q := &s.list[k]
				t.add(g, full, q.nodes, q.h, q.b, 1, func(v *Values) []float64 {
					var e []float64
					for i, bar := range q.rel {
						x := bar.Between(v.Poses[q.nodes[0]].Between(v.Poses[q.nodes[i+1]]))
						l := x.Log()
						e = append(e, pick(g.Dim, &l)...)
					}
					return e
				})
			}
		}
	}
	if t.size > 0 {
		t.h = mat.NewSymDense(t.size, full)
	}
	return t
}

func pick(dim int, t *lie.Tangent) (out []float64) {
	for _, c := range components(dim) {
		out = append(out, t[c])
	}
	return out
}

// jacobian of a stacked residual, rows of len(nodes) dim.
func jacobian(g *Graph, nodes []int32, residual func(*Values) []float64) *mat.Dense {
	const h = 1e-5
	v := &g.Values
	rows := len(residual(v))
	j := mat.NewDense(rows, g.Dim*len(nodes), nil)
	for k, node := range nodes {
		x := v.Poses[node]
		for c, component := range components(g.Dim) {
			v.Poses[node] = plus(x, component, h)
			up := residual(v)
			v.Poses[node] = plus(x, component, -h)
			down := residual(v)
			v.Poses[node] = x
			for r := range up {
				j.Set(r, g.Dim*k+c, (up[r]-down[r])/(2*h))
			}
		}
	}
	return j
}

func (t *dense) add(g *Graph, full []float64, nodes []int32, info, b []float64, w float64, residual func(*Values) []float64) {
	e := residual(&g.Values)
	n := len(e)
	j := jacobian(g, nodes, residual)
	omega := mat.NewDense(n, n, info)
	var oe mat.VecDense
	oe.MulVec(omega, mat.NewVecDense(n, e))
	for i, x := range e {
		t.cost += w * x * oe.AtVec(i) / 2
		if b != nil {
			t.cost += w * x * b[i]
			oe.SetVec(i, oe.AtVec(i)+b[i])
		}
	}
	var jo, h mat.Dense
	var grad mat.VecDense
	jo.Mul(j.T(), omega)
	h.Mul(&jo, j)
	grad.MulVec(j.T(), &oe)
	for a, p := range nodes {
		if t.offset[p] < 0 {
			continue
		}
		for r := range g.Dim {
			row := t.offset[p] + r
			t.g[row] += w * grad.AtVec(g.Dim*a+r)
			for c, q := range nodes {
				for l := range g.Dim {
					if t.offset[q] >= 0 {
						full[row*t.size+t.offset[q]+l] += w * h.At(g.Dim*a+r, g.Dim*c+l)
					}
				}
			}
		}
	}
}

// column k of the solver's matrix, by a product with a unit vector.
func column(s *Solver, k int) []float64 {
	x, y := make([]float64, len(s.step)), make([]float64, len(s.step))
	x[k] = 1
	s.now.Matrix.Mul(x, y)
	return y
}

type failer interface {
	Helper()
	Fatalf(format string, args ...any)
}

// near compares two vectors relative to the largest entry of the second, or to least.
func near(t failer, what string, got, want []float64, tolerance, least float64) {
	t.Helper()
	scale := least
	for _, w := range want {
		scale = math.Max(scale, math.Abs(w))
	}
	if len(got) != len(want) {
		t.Fatalf("%s: %d numbers, want %d", what, len(got), len(want))
	}
	for i := range got {
		if !(math.Abs(got[i]-want[i]) <= tolerance*scale) {
			t.Fatalf("%s: entry %d is %.12g, want %.12g (of at most %g)", what, i, got[i], want[i], scale)
		}
	}
}

// samePoses compares poses in metres and radians.
func samePoses(t failer, what string, got, want []lie.SE3, tolerance float64) {
	t.Helper()
	for i := range got {
		d := got[i].Between(want[i])
		l := d.Log()
		for _, x := range l {
			if !(math.Abs(x) <= tolerance) {
				t.Fatalf("%s: pose %d is off by %v", what, i, l)
			}
		}
	}
}

func solver(t failer, g *Graph, fixed []int32) *Solver {
	t.Helper()
	s, err := NewSolver(g, fixed, sparse.Options{})
	if err != nil {
		t.Fatalf("new solver: %v", err)
	}
	return s
}

func random(seed uint64) *rand.Rand { return rand.New(rand.NewPCG(seed, 7)) }

// both runs a test in the plane and in space.
func both(t *testing.T, test func(t *testing.T, dim int)) {
	t.Run("plane", func(t *testing.T) { test(t, 3) })
	t.Run("space", func(t *testing.T) { test(t, 6) })
}
