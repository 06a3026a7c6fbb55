package sparse

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

type testCase struct {
	name string
	p    Pattern
	last []int32
}

func testCases() []testCase {
	rng := rand.New(rand.NewPCG(1, 2))
	var cases []testCase
	add := func(name string, n int, pairs [][2]int32) {
		for _, d := range []int{3, 6} {
			cases = append(cases, testCase{fmt.Sprintf("%s-%d", name, d), Pattern{uniform(n, d), pairs}, nil})
		}
		cases = append(cases, testCase{name + "-mixed", Pattern{mixed(rng, n), pairs}, nil})
		var last []int32
		for _, i := range rng.Perm(n)[:(n+4)/5] {
			last = append(last, int32(i))
		}
		cases = append(cases, testCase{name + "-last", Pattern{mixed(rng, n), pairs}, last})
	}
	add("single", 1, nil)
	add("pair", 2, chain(2))
	add("isolated", 7, nil)
	add("chain", 60, chain(60))
	add("grid", 81, grid(9, 9))
	add("cube", 64, cube(4))
	add("tree", 80, tree(rng, 80))
	add("star", 50, func() (p [][2]int32) {
		for i := int32(1); i < 50; i++ {
			p = append(p, [2]int32{0, i})
		}
		return p
	}())
	add("complete", 40, func() (p [][2]int32) {
		for i := range int32(40) {
			for j := range i {
				p = append(p, [2]int32{j, i})
			}
		}
		return p
	}())
	for k, density := range []float64{0.5, 1, 2, 4} {
		add(fmt.Sprintf("random%d", k), 70, randomGraph(rng, 70, density))
	}
	return cases
}

func relativeDifference(a, b []float64) float64 {
	diff, size := 0.0, 0.0
	for i := range a {
		diff = math.Max(diff, math.Abs(a[i]-b[i]))
		size = math.Max(size, math.Abs(b[i]))
	}
	return diff / size
}

func randomVector(rng *rand.Rand, n int) []float64 {
	v := make([]float64, n)
	for i := range v {
		v[i] = rng.NormFloat64()
	}
	return v
}

func TestAgainstDense(t *testing.T) { eachKernel(t, testAgainstDense) }

func testAgainstDense(t *testing.T) {
	for _, c := range testCases() {
		t.Run(c.name, func(t *testing.T) {
			rng := rand.New(rand.NewPCG(3, 4))
			s := mustAnalyse(t, c.p, Options{Last: c.last})
			m, f := s.NewMatrix(), NewFactor(s)
			fill(rng, m, 0.1)
			h := dense(m)
			var chol mat.Cholesky
			if !chol.Factorize(h) {
				t.Fatal("the test matrix is not positive definite")
			}
			want := randomVector(rng, s.Size())
			b := make([]float64, s.Size())
			m.Mul(want, b)

			x := make([]float64, s.Size())
			if err := f.FactoriseSolve(m, b, x); err != nil {
				t.Fatal(err)
			}
			var twin mat.VecDense
			if err := chol.SolveVecTo(&twin, mat.NewVecDense(len(b), b)); err != nil {
				t.Fatal(err)
			}
			if d := relativeDifference(x, twin.RawVector().Data); d > 1e-11 {
				t.Errorf("FactoriseSolve differs from the dense solution by %g", d)
			}
			if d := math.Abs(f.LogDet() - chol.LogDet()); d > 1e-11*float64(s.Size()) {
				t.Errorf("LogDet differs by %g", d)
			}
			if d := relativeDifference(applyFactor(f, want), b); d > 1e-14 {
				t.Errorf("|LL'x-Hx| = %g |Hx|", d)
			}
			if err := f.Factorise(m); err != nil {
				t.Fatal(err)
			}
			y := append([]float64(nil), b...)
			f.Solve(y, y)
			if d := relativeDifference(y, x); d > 1e-12 {
				t.Errorf("Solve differs from FactoriseSolve by %g", d)
			}
			const count = 50
			many := make([]float64, count*s.Size())
			for k := range count {
				floats.ScaleTo(many[k*s.Size():(k+1)*s.Size()], float64(k), b)
			}
			f.SolveMany(many, count)
			for k := range count {
				for i, v := range many[k*s.Size() : (k+1)*s.Size()] {
					if d := math.Abs(v - float64(k)*x[i]); !(d <= 1e-11*float64(k)*floats.Norm(x, 2)) {
						t.Fatalf("SolveMany: scalar %d of vector %d is off by %g", i, k, d)
					}
				}
			}
			checkRespond(t, f, h, &chol)
			checkInverse(t, f, m, &chol)
			checkSchur(t, f, m, h, b, x)
		})
	}
}

// applyFactor returns L L' x.
func applyFactor(f *Factor, x []float64) []float64 {
	f.enter(x)
	s := f.s
	y := make([]float64, s.Size()) // L'x
	rows := func(t *front) (at []int) {
		for i := range t.k {
			at = append(at, t.pivot+i)
		}
		for _, g := range s.toVector[t.gather[0]:t.gather[1]] {
			for i := range g.length {
				at = append(at, int(g.dst+i))
			}
		}
		return at
	}
	entry := func(t *front, r, c int) float64 {
		switch {
		case r == c:
			return 1 / f.val[t.d+c*t.ldd+c]
		case r < t.k:
			return f.val[t.d+c*t.ldd+r]
		}
		return f.val[t.b+c*t.ldr+r-t.k]
	}
	for i := range s.fronts {
		t := &s.fronts[i]
		at := rows(t)
		for c := range t.k {
			for r := c; r < t.k+t.r; r++ {
				y[t.pivot+c] += entry(t, r, c) * f.x[at[r]]
			}
		}
	}
	clear(f.x)
	for i := range s.fronts {
		t := &s.fronts[i]
		at := rows(t)
		for c := range t.k {
			for r := c; r < t.k+t.r; r++ {
				f.x[at[r]] += entry(t, r, c) * y[t.pivot+c]
			}
		}
	}
	out := make([]float64, s.Size())
	f.leave(out)
	return out
}

func checkInverse(t *testing.T, f *Factor, m *Matrix, chol *mat.Cholesky) {
	t.Helper()
	s := f.s
	var inv mat.SymDense
	if err := chol.InverseTo(&inv); err != nil {
		t.Fatal(err)
	}
	out := s.NewMatrix()
	for i := range out.data {
		out.data[i] = math.NaN()
	}
	f.SelectedInverse(out)
	scale := mat.Max(&inv)
	compare := func(i, j int32, z []float64) {
		for a := range int(s.dims[i]) {
			for b := range int(s.dims[j]) {
				want := inv.At(int(s.offset[i])+a, int(s.offset[j])+b)
				if d := math.Abs(z[a*int(s.dims[j])+b] - want); !(d <= 1e-11*scale) {
					t.Fatalf("inverse block (%d, %d) entry (%d, %d) is off by %g of %g", i, j, a, b, d, scale)
				}
			}
		}
	}
	for i := range s.dims {
		compare(int32(i), int32(i), out.Diag(i))
	}
	for k, q := range s.pairs {
		compare(q[0], q[1], out.Off(k))
	}
}

// checkSchur compares Schur complement and reduced right-hand side with the dense
// ones, and Expand with the solution x of H x = b.
func checkSchur(t *testing.T, f *Factor, m *Matrix, h *mat.SymDense, b, x []float64) {
	t.Helper()
	s := f.s
	var isLast = make([]bool, s.Size())
	var lastAt, freeAt []int
	for _, i := range s.last {
		for a := s.offset[i]; a < s.offset[i+1]; a++ {
			lastAt = append(lastAt, int(a))
			isLast[a] = true
		}
	}
	for a := range s.Size() {
		if !isLast[a] {
			freeAt = append(freeAt, a)
		}
	}
	if err := f.Reduce(m, b); err != nil {
		t.Fatal(err)
	}
	y := make([]float64, s.Size())
	for _, a := range lastAt {
		y[a] = x[a]
	}
	f.Expand(y)
	if d := relativeDifference(y, x); d > 1e-11 {
		t.Errorf("Expand differs from the solution by %g", d)
	}
	if len(lastAt) == 0 || len(freeAt) == 0 {
		return
	}
	pick := func(rows, cols []int) *mat.Dense {
		out := mat.NewDense(len(rows), len(cols), nil)
		for i, r := range rows {
			for j, c := range cols {
				out.Set(i, j, h.At(r, c))
			}
		}
		return out
	}
	var z, want, g mat.Dense
	if err := z.Solve(pick(freeAt, freeAt), pick(freeAt, lastAt)); err != nil {
		t.Fatal(err)
	}
	want.Mul(pick(lastAt, freeAt), &z)
	want.Sub(pick(lastAt, lastAt), &want)
	schur, rhs := f.SchurLast()
	if d := relativeDifference(schur, want.RawMatrix().Data); d > 1e-11 {
		t.Errorf("Schur complement differs by %g", d)
	}
	bl, bf := mat.NewDense(len(lastAt), 1, nil), mat.NewDense(len(freeAt), 1, nil)
	for i, a := range lastAt {
		bl.Set(i, 0, b[a])
	}
	for i, a := range freeAt {
		bf.Set(i, 0, b[a])
	}
	g.Mul(z.T(), bf)
	g.Sub(bl, &g)
	if d := relativeDifference(rhs, g.RawMatrix().Data); d > 1e-10 {
		t.Errorf("reduced right-hand side differs by %g", d)
	}
}

func TestIndefinite(t *testing.T) { eachKernel(t, testIndefinite) }

func testIndefinite(t *testing.T) {
	for _, c := range testCases() {
		t.Run(c.name, func(t *testing.T) {
			rng := rand.New(rand.NewPCG(5, 6))
			s := mustAnalyse(t, c.p, Options{Last: c.last})
			m, f := s.NewMatrix(), NewFactor(s)
			bad := rng.IntN(s.Blocks())
			for _, v := range []float64{-1, 0, math.NaN(), math.Inf(1)} {
				// Without coupling the culprit is unambiguous.
				m.Zero()
				for i := range s.dims {
					d := int(s.dims[i])
					for a := range d {
						m.Diag(i)[a*d+a] = 1
					}
				}
				m.Diag(bad)[0] = v
				var e *NotPositiveError
				if err := f.Factorise(m); !errors.As(err, &e) || e.Block != bad {
					t.Fatalf("pivot %g in block %d: got %v", v, bad, err)
				}
			}
			fill(rng, m, 0.1)
			b := randomVector(rng, s.Size())
			x, y := make([]float64, s.Size()), make([]float64, s.Size())
			if err := f.FactoriseSolve(m, b, x); err != nil {
				t.Fatalf("factor not reusable: %v", err)
			}
			if err := NewFactor(s).FactoriseSolve(m, b, y); err != nil {
				t.Fatal(err)
			}
			for i := range x {
				if x[i] != y[i] {
					t.Fatal("a reused factor gives other bits than a new one")
				}
			}
		})
	}
}

// A levelling network without datum is singular however the rounding falls; with a
// weak datum it is not.
func TestSingular(t *testing.T) { eachKernel(t, testSingular) }

func testSingular(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 8))
	for trial := range 300 {
		n, d := 2+rng.IntN(60), 3+3*(trial%2)
		s := mustAnalyse(t, Pattern{uniform(n, d), tree(rng, n)}, Options{})
		m, f := s.NewMatrix(), NewFactor(s)
		for k, q := range s.pairs {
			w := make([]float64, d*d) // weight of the difference of two block rows
			for range 2 * d {
				v := randomVector(rng, d)
				for a := range w {
					w[a] += v[a/d] * v[a%d]
				}
			}
			floats.Add(m.Diag(int(q[0])), w)
			floats.Add(m.Diag(int(q[1])), w)
			floats.SubTo(m.Off(k), m.Off(k), w)
		}
		var e *NotPositiveError
		if err := f.Factorise(m); !errors.As(err, &e) {
			t.Fatalf("tree of %d without datum: got %v", n, err)
		}
		for a := range d {
			m.Diag(0)[a*(d+1)] += 1e-6
		}
		if err := f.Factorise(m); err != nil {
			t.Fatalf("tree of %d with weak datum: %v", n, err)
		}
	}
}

// checkRespond solves for loads at a few scalars, one of them twice, against the dense matrix.
func checkRespond(t *testing.T, f *Factor, h *mat.SymDense, chol *mat.Cholesky) {
	t.Helper()
	rng := rand.New(rand.NewPCG(9, uint64(f.s.Size())))
	for _, count := range []int{1, 7, Together} {
		n := f.s.Size()
		want := mat.NewDense(n, count, nil)
		var loads []Load
		for c := range count {
			for range 3 {
				b := rng.IntN(len(f.s.dims))
				l := Load{Block: b, Scalar: rng.IntN(int(f.s.dims[b])), Column: c, Value: rng.NormFloat64()}
				loads = append(loads, l)
				row := int(f.s.offset[b]) + l.Scalar
				want.Set(row, c, want.At(row, c)+l.Value)
			}
		}
		var twin mat.Dense
		if err := chol.SolveTo(&twin, want); err != nil {
			t.Fatal(err)
		}
		seen, largest := 0, mat.Max(&twin)-mat.Min(&twin)
		f.Respond(count, loads, func(block int, x []float64) {
			for a := range int(f.s.dims[block]) {
				seen++
				for c := range count {
					if d := math.Abs(x[a*Together+c] - twin.At(int(f.s.offset[block])+a, c)); !(d <= 1e-11*largest) {
						t.Fatalf("Respond: scalar %d of block %d, right-hand side %d of %d is off by %g", a, block, c, count, d)
					}
				}
			}
		})
		if seen != n {
			t.Errorf("Respond handed over %d of %d scalars", seen, n)
		}
	}
}

func TestNoAllocation(t *testing.T) {
	s := mustAnalyse(t, Pattern{uniform(343, 6), cube(7)}, Options{Last: []int32{3, 1}})
	m, f, out := s.NewMatrix(), NewFactor(s), s.NewMatrix()
	fill(rand.New(rand.NewPCG(1, 1)), m, 0.1)
	b := make([]float64, s.Size())
	many := make([]float64, 4*s.Size())
	f.SelectedInverse(out)
	f.SolveMany(many, 4)
	if n := testing.AllocsPerRun(5, func() {
		if f.Factorise(m) != nil || f.FactoriseSolve(m, b, b) != nil || f.Reduce(m, b) != nil {
			t.Fatal("not positive")
		}
		f.Expand(b)
		f.Solve(b, b)
		f.SolveMany(many, 4)
		f.LogDet()
		f.SelectedInverse(out)
	}); n != 0 {
		t.Errorf("%v allocations", n)
	}
}
