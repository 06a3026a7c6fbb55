package certificate

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
)

// random is a graph of n poses, a chain with some closures, whose measurements and values have nothing to do with each other; parts
// copies of it hang by nothing.
func random(r *rand.Rand, dim, n, parts int) (*posegraph.Graph, *posegraph.Between) {
	pose := func() lie.SE3 {
		if dim == 3 {
			return lie.Exp(lie.Tangent{0: 5 * r.NormFloat64(), 1: 5 * r.NormFloat64(), 5: 3 * r.NormFloat64()})
		}
		return lie.Exp(lie.Tangent{5 * r.NormFloat64(), 5 * r.NormFloat64(), 5 * r.NormFloat64(), r.NormFloat64(), r.NormFloat64(), r.NormFloat64()})
	}
	poses := make([]lie.SE3, n*parts)
	for i := range poses {
		poses[i] = pose()
	}
	g := posegraph.New(dim, poses)
	b := g.AddBetween()
	for part := range parts {
		for i := 1; i < n; i++ {
			for _, j := range []int{i - 1, r.IntN(n)} {
				if i == j {
					continue
				}
				sigma := make([]float64, 6)
				for c := range sigma {
					sigma[c] = 0.1 + r.Float64()
				}
				from, to := part*n+i, part*n+j
				if r.IntN(2) == 0 {
					from, to = to, from
				}
				b.Add(int32(from), int32(to), pose(), info(sigma))
			}
		}
	}
	return g, b
}

// The cost and its gradient, against its definition and central differences.
func TestSurrogate(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for _, dim := range []int{3, 6} {
		g, b := random(r, dim, 8, 1)
		c := newSurrogate(b, dim)
		want := 0.0
		for k := range b.I {
			i, j, z := &g.Values.Poses[b.I[k]], &g.Values.Poses[b.J[k]], &b.Z[k]
			ahead, there := i.R.Mul(z.R), i.R.Apply(z.T)
			for a := range 9 {
				want += c.kappa[k] * (j.R[a] - ahead[a]) * (j.R[a] - ahead[a]) / 2
			}
			for a := range 3 {
				d := j.T[a] - i.T[a] - there[a]
				want += c.tau[k] * d * d / 2
			}
		}
		if dim == 3 { // the third axis adds nothing, and 2 x 2 rotations have half the distance
			want2 := 0.0
			for k := range b.I {
				e := g.Values.Poses[b.I[k]].Between(g.Values.Poses[b.J[k]])
				off := b.Z[k].Between(e)
				turn := off.Log()[5]
				d := math.Hypot(e.T[0]-b.Z[k].T[0], e.T[1]-b.Z[k].T[1])
				want2 += 2*c.kappa[k]*(1-math.Cos(turn)) + c.tau[k]*d*d/2
			}
			if math.Abs(want-want2) > 1e-9*want {
				t.Fatalf("two ways to the cost: %g and %g", want, want2)
			}
		}
		bare := posegraph.New(dim, g.Values.Poses)
		bare.Sets = append(bare.Sets, c)
		s, err := posegraph.NewSolver(bare, []int32{0}, sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		cost, gradient := s.Linearise()
		if math.Abs(cost-want) > 1e-12*want || math.Abs(bare.Cost()-want) > 1e-12*want {
			t.Errorf("dimension %d: cost %.12g and %.12g, want %.12g", dim, cost, bare.Cost(), want)
		}
		gradient = slices.Clone(gradient)
		const h = 1e-5
		n := 0
		for v := 1; v < len(bare.Values.Poses); v++ {
			x := bare.Values.Poses[v]
			for _, component := range c.components() {
				var xi lie.Tangent
				xi[component] = h
				bare.Values.Poses[v] = x.Plus(xi)
				up := bare.Cost()
				xi[component] = -h
				bare.Values.Poses[v] = x.Plus(xi)
				if d := (up - bare.Cost()) / (2 * h); math.Abs(d-gradient[n]) > 1e-6*(1+math.Abs(d)) {
					t.Errorf("dimension %d, pose %d, component %d: gradient %g, differences say %g", dim, v, component, gradient[n], d)
				}
				bare.Values.Poses[v] = x
				n++
			}
		}
	}
}

// dense returns the rows of S that mean something.
func (s *dual) dense(t *testing.T) *mat.SymDense {
	n := len(s.component)
	m := mat.NewSymDense(n*(1+s.m), nil)
	x, y := make([]float64, n*s.width), make([]float64, n*s.width)
	for i := range n {
		for a := range 1 + s.m {
			clear(x)
			x[i*s.width+a] = 1
			s.matrix.Mul(x, y)
			for j := range n {
				for b := range 1 + s.m {
					m.SetSym(i*(1+s.m)+a, j*(1+s.m)+b, y[j*s.width+b])
				}
			}
		}
	}
	return m
}

// At the bottom S takes the gauge to zero, its trace with Y is the cost, and the gap is the eigenvalue that a dense solver finds; for two
// islands as for one. A point where S has no negative eigenvalue is certified, and no other.
func TestDualAgainstDense(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 2))
	certified, refused := 0, 0
	for trial := range 60 {
		dim, parts := 3+3*(trial%2), 1+trial/2%2
		g, b := random(r, dim, 7, parts)
		if trial%3 > 0 { // measurements that belong to each other, more or less
			truth := slices.Clone(g.Values.Poses)
			for k := range b.Z {
				noise := lie.Tangent{5: 0.3 * r.NormFloat64(), 0: r.NormFloat64()}
				b.Z[k] = truth[b.I[k]].Between(truth[b.J[k]]).Plus(noise)
			}
		}
		c := newSurrogate(b, dim)
		bare := posegraph.New(dim, slices.Clone(g.Values.Poses))
		bare.Sets = append(bare.Sets, c)
		solver, err := posegraph.NewSolver(bare, bare.Anchors(), sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		solver.Optimise(posegraph.Options{Tolerance: 1e-20, MaxIterations: 20000})
		component, count := bare.Components()
		s, err := newDual(c, bare.Values.Poses, component, count)
		if err != nil || count != parts {
			t.Fatal(count, err)
		}
		m := s.dense(t)
		scale := mat.Max(m)
		_, gradient := solver.Linearise()
		rest := math.Sqrt(inner(gradient, gradient)) // where rounding ends the descent
		for v, x := range s.gauge {
			var at, y mat.VecDense
			at.ReuseAsVec(len(component) * (1 + s.m))
			for i := range component {
				for a := range 1 + s.m {
					at.SetVec(i*(1+s.m)+a, x[i*s.width+a])
				}
			}
			y.MulVec(m, &at)
			if off := mat.Norm(&y, 2); off > 1e-8*scale+10*rest {
				t.Errorf("trial %d: S takes vector %d of the gauge to %g, the scale being %g", trial, v, off, scale)
			}
		}
		var eigen mat.EigenSym
		if !eigen.Factorize(m, false) {
			t.Fatal("no eigenvalues")
		}
		all := eigen.Values(nil)
		result, err := Certify(g, b, always)
		if err != nil {
			t.Fatal(err)
		}
		negative := 0
		for _, x := range all {
			if x < -1e-9*scale {
				negative++
			}
		}
		if result.Certified != (negative == 0) {
			t.Errorf("trial %d: certified %v with %d negative eigenvalues: %+v", trial, result.Certified, negative, result)
		}
		if negative > 0 {
			refused++
			continue
		}
		certified++
		if want := all[parts*(s.m+1)]; math.Abs(result.Gap-want) > 1e-3*want || math.Abs(result.Objective-2*bare.Cost()) > 1e-6*bare.Cost() {
			t.Errorf("trial %d: gap %g, dense %g; objective %g, want %g", trial, result.Gap, want, result.Objective, 2*bare.Cost())
		}
	}
	if certified < 10 || refused < 10 {
		t.Errorf("%d certified and %d refused: want some of both", certified, refused)
	}
}
