package partition

import (
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"

	"selvage/internal/lie"
)

// drawGraph draws a small graph with one to three parts, chains with some closures, doubled links included.
func drawGraph(t *rapid.T, largest int) (*graph, []int32) {
	dim := 3 * rapid.IntRange(1, 2).Draw(t, "dim")
	parts := rapid.SliceOfN(rapid.IntRange(1, largest), 1, 3).Draw(t, "parts")
	closures := rapid.IntRange(0, largest).Draw(t, "closures")
	rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "seed"), 0))
	g := walk(dim, parts, closures, rng)
	share := rapid.SampledFrom([]float64{0, .1, .3, .7}).Draw(t, "separators")
	var separators []int32
	for v := range g.poses {
		if rng.Float64() < share {
			separators = append(separators, int32(v))
		}
	}
	return g, separators
}

func condense(t interface {
	Helper()
	Fatal(...any)
}, g *graph, terms []Quadratic, separators []int32) *Condensed {
	t.Helper()
	c, err := Condense(g.dim, len(g.poses), terms, separators)
	if err != nil {
		t.Fatal(err)
	}
	return c
}

// The cliques, read as functions of relative poses, have the gradient and the matrix of the dense Schur complement of the whole
// graph; and back-substitution gives the interior of the whole solution.
func TestCondensingIsExact(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		g, separators := drawGraph(t, 8)
		if len(g.links) == 0 {
			t.Skip("nothing measured")
		}
		d, n := g.dim, len(g.poses)
		terms := g.linearise()
		c := condense(t, g, terms, separators)
		if rapid.Bool().Draw(t, "poses known") {
			var err error
			if c, err = CondenseAt(d, g.poses, terms, separators); err != nil {
				t.Fatal(err)
			}
		}

		H, b := dense(d, n, terms)
		S, s := schur(d, n, H, b, c.Junctions)
		G, gr := dense(d, n, g.expand(c))
		if e := largest(diff(restrict2(d, n, G, c.Junctions), S)) / largest(H); !(e < 1e-12) {
			t.Fatalf("matrix is off by %.2g", e)
		}
		if e := largest(diff(restrict(d, n, gr, c.Junctions), s)) / largest(b); !(e < 1e-12) {
			t.Fatalf("gradient is off by %.2g", e)
		}
		if e := c.NullResidual(g.poses); !(e < 1e-12) {
			t.Fatalf("H N = %.2g |H|", e)
		}

		// A step at the junctions; the interior must zero its gradient H d + b.
		rng := rand.New(rand.NewPCG(1, 2))
		steps := make([]float64, d*n)
		for i := range steps {
			steps[i] = math.NaN()
		}
		for _, v := range c.Junctions {
			for j := 0; j < d; j++ {
				steps[int(v)*d+j] = .1 * rng.NormFloat64()
			}
		}
		c.Interior(steps)
		r := product(d*n, H, steps)
		for v := 0; v < n; v++ {
			if slices.Contains(c.Junctions, int32(v)) {
				continue
			}
			for j := v * d; j < (v+1)*d; j++ {
				if e := math.Abs(r[j]+b[j]) / largest(H); !(e < 1e-12) {
					t.Fatalf("pose %d keeps a gradient of %.2g", v, e)
				}
			}
		}
	})
}

func all(n int) []int32 {
	s := make([]int32, n)
	for i := range s {
		s[i] = int32(i)
	}
	return s
}

func restrict(d, n int, x []float64, kept []int32) (out []float64) {
	for _, v := range kept {
		out = append(out, x[int(v)*d:][:d]...)
	}
	return out
}

func restrict2(d, n int, x []float64, kept []int32) (out []float64) {
	for _, v := range kept {
		for i := 0; i < d; i++ {
			out = append(out, restrict(d, n, x[(int(v)*d+i)*d*n:][:d*n], kept)...)
		}
	}
	return out
}

func largest(x []float64) (m float64) {
	for _, v := range x {
		m = max(m, math.Abs(v))
	}
	return m
}

func diff(a, b []float64) []float64 {
	d := make([]float64, len(a))
	for i := range a {
		d[i] = a[i] - b[i]
	}
	return d
}

// Moving the whole graph, even far, changes no clique; the measurements see relative poses only.
func TestCliquesAreIndifferentToTheFrame(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		g, separators := drawGraph(t, 10)
		rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "motion"), 0))
		far := g.moved(lie.Exp(tangent(g.dim, rng, 50, 3)))
		a, b := condense(t, g, g.linearise(), separators), condense(t, far, far.linearise(), separators)
		sameCliques(t, a, b, 1e-10)
	})
}

func sameCliques(t *rapid.T, a, b *Condensed, tolerance float64) {
	t.Helper()
	if d := cmp.Diff(a.Junctions, b.Junctions); d != "" {
		t.Fatal("junctions: ", d)
	}
	if a.Bytes != b.Bytes || len(a.Cliques) != len(b.Cliques) {
		t.Fatalf("%d bytes in %d cliques, then %d in %d", a.Bytes, len(a.Cliques), b.Bytes, len(b.Cliques))
	}
	gradient := 1.0 // gradients may cancel to rounding: measured against the largest, at least one
	for _, q := range a.Cliques {
		gradient = max(gradient, largest(q.B))
	}
	for i := range a.Cliques {
		p, q := a.Cliques[i], b.Cliques[i]
		if !slices.Equal(p.Nodes, q.Nodes) {
			t.Fatalf("clique %v became %v", p.Nodes, q.Nodes)
		}
		if e := apart(q.H, p.H); !(e < tolerance) {
			t.Fatalf("H of %v is off by %.2g", p.Nodes, e)
		}
		if e := largest(diff(p.B, q.B)) / gradient; !(e < tolerance) {
			t.Fatalf("b of %v is off by %.2g", p.Nodes, e)
		}
	}
}

// A robot that stands still reports odometry of any strength. Along a chain, covariances add up without a subtraction:
// C <- Ad C Ad' + Omega^-1 in the frame of the last pose. The pair over both ends must be the inverse of the sum, however
// strong some links are.
func TestStrongLinksBesideWeakOnes(t *testing.T) {
	for _, strong := range []float64{1e2, 1e6, 1e10, 1e16} {
		rng := rand.New(rand.NewPCG(1, 2))
		g := walk(6, []int{41}, 0, rng)
		C := mat.NewDense(6, 6, nil)
		for i := range g.links {
			l := &g.links[i]
			l.z = g.poses[l.from].Between(g.poses[l.to])
			clear(l.omega)
			back := l.z.Inv()
			ad := back.Adjoint()
			var moved mat.Dense
			moved.Mul(mat.NewDense(6, 6, ad[:]), C)
			C.Mul(&moved, mat.NewDense(6, 6, ad[:]).T())
			for k := 0; k < 6; k++ {
				w := 100 * (1 + rng.Float64())
				if i%3 == 0 || i > 30 {
					w *= strong / 100
				}
				l.omega[7*k] = w
				C.Set(k, k, C.At(k, k)+1/w)
			}
		}
		var want mat.Dense
		if err := want.Inverse(C); err != nil {
			t.Fatal(err)
		}
		c, err := CondenseAt(6, g.poses, g.linearise(), []int32{0, 40})
		if err != nil {
			t.Fatal(err)
		}
		if e := apart(c.Cliques[0].H, want.RawMatrix().Data); !(e < 2e-13) {
			t.Errorf("links of %.0g beside 100: off by %.2g", strong, e)
		}
	}
}

// Neither the order of the terms nor that of the poses within one matters.
func TestOrderOfTermsDoesNotMatter(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		g, separators := drawGraph(t, 10)
		rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "shuffle"), 0))
		terms := g.linearise()
		a := condense(t, g, terms, separators)
		rng.Shuffle(len(terms), func(i, j int) { terms[i], terms[j] = terms[j], terms[i] })
		for i := range terms {
			if rng.IntN(2) == 0 {
				terms[i] = swapped(g.dim, terms[i])
			}
		}
		slices.Reverse(separators)
		b := condense(t, g, terms, append(separators, separators...))
		sameCliques(t, a, b, 1e-10)
	})
}

// swapped returns the same term with its two poses in the other order.
func swapped(d int, q Quadratic) Quadratic {
	m := 2 * d
	s := Quadratic{[]int32{q.Nodes[1], q.Nodes[0]}, make([]float64, m*m), make([]float64, m)}
	for i := 0; i < m; i++ {
		s.B[i] = q.B[(i+d)%m]
		for j := 0; j < m; j++ {
			s.H[i*m+j] = q.H[(i+d)%m*m+(j+d)%m]
		}
	}
	return s
}

// Other names for the poses may lead to other junctions (ties are decided by number), but to the same information on the separators.
func TestRelabelledPosesSayTheSame(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		g, _ := drawGraph(t, 7)
		n, d := len(g.poses), g.dim
		rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "names"), 0))
		name := rng.Perm(n)
		h := &graph{dim: g.dim, poses: make([]lie.SE3, n)}
		for v, w := range name {
			h.poses[w] = g.poses[v]
		}
		for _, l := range g.links {
			l.from, l.to = int32(name[l.from]), int32(name[l.to])
			h.links = append(h.links, l)
		}
		separators := []int32{0}
		for v := int32(1); int(v) < n; v++ { // one in every part, at least
			if !slices.ContainsFunc(g.links, func(l link) bool { return l.to == v && l.from == v-1 }) || rng.IntN(4) == 0 {
				separators = append(separators, v)
			}
		}
		renamed := make([]int32, len(separators))
		for i, v := range separators {
			renamed[i] = int32(name[v])
		}
		if len(g.links) == 0 {
			t.Skip("nothing measured")
		}
		whole, _ := dense(d, n, g.linearise())
		marginal := func(g *graph, separators []int32) []float64 {
			c := condense(t, g, g.linearise(), separators)
			H, b := dense(d, n, g.expand(c))
			for _, v := range all(n) { // interior poses: anything regular, without effect
				if !slices.Contains(c.Junctions, v) {
					for j := 0; j < d; j++ {
						H[(int(v)*d+j)*(d*n+1)] = 1
					}
				}
			}
			S, s := schur(d, n, H, b, separators)
			return append(S, s...)
		}
		if e := largest(diff(marginal(h, renamed), marginal(g, separators))) / largest(whole); !(e < 1e-12) {
			t.Fatalf("off by %.2g", e)
		}
	})
}

func TestOnePoseRemainsWithoutSeparators(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	for _, dim := range []int{3, 6} {
		g := walk(dim, []int{9, 1, 4}, 5, rng)
		c := condense(t, g, g.linearise(), nil)
		if len(c.Junctions) != 3 || len(c.Cliques) != 0 || c.Bytes != 3*PoseBytes {
			t.Errorf("dimension %d: junctions %v, %d cliques, %d bytes; expected one pose of each part", dim, c.Junctions, len(c.Cliques), c.Bytes)
		}
		if j := c.Junctions; j[0] > 8 || j[1] != 9 || j[2] < 10 {
			t.Errorf("dimension %d: junctions %v, expected one of 0..8, then 9, then one of 10..13", dim, j)
		}
	}
}

// A term that is not relative, here an absolute one smuggled in over two poses, shows in the null residual.
func TestNullResidualSeesAbsoluteTerms(t *testing.T) {
	g := walk(6, []int{12}, 3, rand.New(rand.NewPCG(7, 8)))
	terms := g.linearise()
	separators := []int32{0, 5, 11}
	if e := condense(t, g, terms, separators).NullResidual(g.poses); !(e < 1e-13) {
		t.Errorf("relative terms: H N = %.2g |H|", e)
	}
	terms[0].H[0] *= 1 + 1e-6
	if e := condense(t, g, terms, separators).NullResidual(g.poses); !(e > 1e-9) {
		t.Errorf("absolute term: H N = %.2g |H|, expected above 1e-9", e)
	}
}

func TestCondenseLeavesItsInputAlone(t *testing.T) {
	g := walk(3, []int{20}, 30, rand.New(rand.NewPCG(9, 10)))
	terms, copied := g.linearise(), g.linearise()
	c := condense(t, g, terms, []int32{3, 4})
	if d := cmp.Diff(copied, terms); d != "" {
		t.Fatal("input changed: ", d)
	}
	before := c.NullResidual(g.poses)
	for i := range terms {
		clear(terms[i].H)
	}
	if after := c.NullResidual(g.poses); before != after {
		t.Errorf("the result looks at the input: %g became %g", before, after)
	}
}

func TestCondenseRefusesBadInput(t *testing.T) {
	good := func() []Quadratic { return walk(6, []int{3}, 0, rand.New(rand.NewPCG(1, 1))).linearise() }
	for _, c := range []struct {
		name       string
		dim, n     int
		change     func(q []Quadratic)
		separators []int32
		want       string
	}{
		{"dimension", 2, 3, nil, nil, "tangents of 2 numbers, expected 3 or 6"},
		{"no poses", 6, 0, nil, nil, "0 poses"},
		{"planar sizes", 3, 3, nil, nil, "factor 0 on 2 poses has 144 numbers in H and 12 in B, expected 36 and 6"},
		{"pose out of range", 6, 2, nil, nil, "factor 1 names pose 2, expected 0..1"},
		{"negative pose", 6, 3, func(q []Quadratic) { q[1].Nodes[0] = -1 }, nil, "factor 1 names pose -1"},
		{"pose twice", 6, 3, func(q []Quadratic) { q[1].Nodes[0] = 2 }, nil, "factor 1 names pose 2 twice"},
		{"no pose", 6, 3, func(q []Quadratic) { q[1] = Quadratic{} }, nil, "factor 1 names no pose"},
		{"not finite", 6, 3, func(q []Quadratic) { q[1].H[7] = math.NaN() }, nil, "factor 1 holds a number that is not finite"},
		{"infinite", 6, 3, func(q []Quadratic) { q[0].B[7] = math.Inf(-1) }, nil, "factor 0 holds a number that is not finite"},
		{"separator", 6, 3, nil, []int32{3}, "separator 3, expected 0..2"},
		{"undetermined", 6, 3, func(q []Quadratic) { clear(q[1].H) }, []int32{0}, "pose 2 is not determined"},
	} {
		q := good()
		if c.change != nil {
			c.change(q)
		}
		_, err := Condense(c.dim, c.n, q, c.separators)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: error %v, expected %q", c.name, err, c.want)
		}
	}
}
