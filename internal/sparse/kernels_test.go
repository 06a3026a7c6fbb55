package sparse

import (
	"math"
	"math/rand/v2"
	"os"
	"regexp"
	"testing"
)

// eachKernel runs a test with the plain Go kernels, and with the accelerated ones
// where the processor has them.
func eachKernel(t *testing.T, run func(t *testing.T)) {
	t.Run("portable", func(t *testing.T) {
		defer usePortable()()
		run(t)
	})
	if accelerated {
		t.Run("accelerated", run)
	}
}

// padded is an m x n column-major matrix with NaN in all padding, and before and
// behind a guard that no kernel may touch.
type padded struct {
	all      []float64
	m, n, ld int
}

const guard = 8

// newPadded allows overrun up to a multiple of four rows behind row m.
func newPadded(rng *rand.Rand, m, n int) *padded {
	p := &padded{m: m, n: n, ld: up4(m) + 4*rng.IntN(3)}
	p.all = make([]float64, p.ld*n+2*guard)
	for i := range p.all {
		p.all[i] = math.NaN()
	}
	for c := range n {
		for r := range m {
			p.x()[r+c*p.ld] = rng.NormFloat64()
		}
	}
	return p
}

func (p *padded) x() []float64            { return p.all[guard:] }
func (p *padded) at(r, c int) float64     { return p.all[guard+r+c*p.ld] }
func (p *padded) set(r, c int, v float64) { p.all[guard+r+c*p.ld] = v }
func (p *padded) copy() *padded {
	q := *p
	q.all = append([]float64(nil), p.all...)
	return &q
}

// check compares p with want where keep says so, and the guards with NaN.
func (p *padded) check(t *testing.T, want *padded, keep func(r, c int) bool) {
	t.Helper()
	for c := range p.n {
		for r := range p.m {
			if !keep(r, c) {
				continue
			}
			if d := math.Abs(p.at(r, c) - want.at(r, c)); !(d <= 1e-13*(1+math.Abs(want.at(r, c)))) {
				t.Fatalf("%d x %d: entry (%d, %d) is %g, want %g", p.m, p.n, r, c, p.at(r, c), want.at(r, c))
			}
		}
	}
	for i := range guard {
		if !math.IsNaN(p.all[i]) || !math.IsNaN(p.all[len(p.all)-1-i]) {
			t.Fatalf("%d x %d: a number was written outside", p.m, p.n)
		}
	}
	for c := range p.n {
		for r := up4(p.m); r < p.ld; r++ {
			if !math.IsNaN(p.at(r, c)) {
				t.Fatalf("%d x %d: padding row %d was written", p.m, p.n, r)
			}
		}
	}
}

func all(r, c int) bool   { return true }
func lower(r, c int) bool { return r >= c }

func TestProduct(t *testing.T) {
	eachKernel(t, func(t *testing.T) {
		rng := rand.New(rand.NewPCG(1, 2))
		for trial := range 2000 {
			m, n, k := 3*rng.IntN(12), 3*rng.IntN(9), 3+3*rng.IntN(9)
			isLower, set := trial%2 == 1, trial%4 > 1
			if isLower {
				m = n
			}
			a, b, c := newPadded(rng, m, k), newPadded(rng, n, k), newPadded(rng, m, n)
			want := c.copy()
			for j := range n {
				for i := range m {
					sum := c.at(i, j)
					if set {
						sum = 0
					}
					for l := range k {
						sum -= a.at(i, l) * b.at(j, l)
					}
					want.set(i, j, sum)
				}
			}
			if set {
				for j := range n {
					for i := range m {
						c.set(i, j, math.NaN())
					}
				}
			}
			product(c.x(), c.ld, a.x(), a.ld, b.x(), b.ld, m, n, k, set, isLower)
			keep := all
			if isLower {
				keep = lower
			}
			c.check(t, want, keep)
		}
	})
}

// Cutting a product into pieces must not change its bits.
func TestProductPieces(t *testing.T) {
	eachKernel(t, func(t *testing.T) {
		rng := rand.New(rand.NewPCG(3, 4))
		for range 300 {
			m, n, k := 12+12*rng.IntN(4), 6+6*rng.IntN(4), 3+3*rng.IntN(9)
			a, b, c := newPadded(rng, m, k), newPadded(rng, n, k), newPadded(rng, m, n)
			whole := c.copy()
			product(whole.x(), c.ld, a.x(), a.ld, b.x(), b.ld, m, n, k, false, false)
			r, s := 12*rng.IntN(m/12), 3*rng.IntN(n/3)
			product(c.x()[s*c.ld:], c.ld, a.x(), a.ld, b.x()[s:], b.ld, r, n-s, k, false, false)
			product(c.x()[r+s*c.ld:], c.ld, a.x()[r:], a.ld, b.x()[s:], b.ld, m-r, n-s, k, false, false)
			product(c.x(), c.ld, a.x(), a.ld, b.x(), b.ld, m, s, k, false, false)
			for j := range n {
				for i := range m {
					if c.at(i, j) != whole.at(i, j) {
						t.Fatalf("%d x %d cut at %d, %d: entry (%d, %d) differs", m, n, r, s, i, j)
					}
				}
			}
		}
	})
}

func TestSolvePanel(t *testing.T) {
	eachKernel(t, func(t *testing.T) {
		rng := rand.New(rand.NewPCG(5, 6))
		for range 2000 {
			m, k, w := 3*rng.IntN(12), 3*rng.IntN(9), 3+3*rng.IntN(2)
			x, b := newPadded(rng, m, k+w), newPadded(rng, w, max(k, 1))
			var l triangle
			full := [6][6]float64{}
			for c, at := 0, 0; c < w; c++ {
				for r := c; r < w; r, at = r+1, at+1 {
					l[at] = rng.NormFloat64()
					if r == c {
						l[at] = 1 + rng.Float64() // the inverse
					}
					full[r][c] = l[at]
				}
			}
			want := x.copy()
			for c := range w {
				for r := range m {
					v := x.at(r, k+c)
					for i := range k {
						v -= x.at(r, i) * b.at(c, i)
					}
					for i := range c {
						v -= want.at(r, k+i) * full[c][i]
					}
					want.set(r, k+c, v*full[c][c])
				}
			}
			solvePanel(x.x(), x.ld, b.x(), b.ld, &l, m, k, w)
			for c := range w {
				for r := range m { // grows like a recurrence: compare relative to the row
					if d := math.Abs(x.at(r, k+c) - want.at(r, k+c)); d < 1e-10*(1+math.Abs(want.at(r, k+c))) {
						x.set(r, k+c, want.at(r, k+c))
					}
				}
			}
			x.check(t, want, all)
		}
	})
}

func TestAddRuns(t *testing.T) {
	eachKernel(t, func(t *testing.T) {
		rng := rand.New(rand.NewPCG(7, 8))
		for range 2000 {
			var runs []run
			rows, target := int32(0), int32(0)
			for range rng.IntN(5) {
				rows += 3 * rng.Int32N(3)
				target += 3 * rng.Int32N(4)
				length := 3 + 3*rng.Int32N(8)
				runs = append(runs, run{rows, target, length})
				rows, target = rows+length, target+length
			}
			skip, step := 0, 0
			cols := 3 + 3*rng.IntN(4)
			if len(runs) > 0 && rng.IntN(2) == 0 {
				skip, step = 3*rng.IntN(int(runs[0].length)/3), 1
				cols = int(runs[0].length) - skip
			}
			src, dst := newPadded(rng, int(rows), cols), newPadded(rng, int(target), cols)
			want := dst.copy()
			for c := range cols {
				for k, q := range runs {
					for i := range int(q.length) {
						if k == 0 && i < skip+c*step {
							continue
						}
						r := int(q.dst) + i
						want.set(r, c, want.at(r, c)+src.at(int(q.src)+i, c))
					}
				}
			}
			addRuns(dst.x(), dst.ld, src.x(), src.ld, cols, runs, skip, step)
			for i, v := range want.all {
				if w := dst.all[i]; v != w && !(math.IsNaN(v) && math.IsNaN(w)) {
					t.Fatalf("runs %v, %d columns, skip %d + %d: entry %d is %g, want %g", runs, cols, skip, step, i-guard, w, v)
				}
			}
		}
	})
}

func TestVectorKernels(t *testing.T) {
	eachKernel(t, func(t *testing.T) {
		rng := rand.New(rand.NewPCG(9, 10))
		for range 2000 {
			m, n := 3*rng.IntN(15), 3*rng.IntN(9)
			a, x, y := newPadded(rng, m, n), newPadded(rng, n, 1), newPadded(rng, m, 1)
			want := y.copy()
			for r := range m {
				for c := range n {
					want.set(r, 0, want.at(r, 0)-a.at(r, c)*x.at(c, 0))
				}
			}
			subtractProduct(y.x(), a.x(), a.ld, x.x(), m, n)
			y.check(t, want, all)

			a, x, y = newPadded(rng, m, n), newPadded(rng, m, 1), newPadded(rng, n, 1)
			want = y.copy()
			for r := range m {
				for c := range n {
					want.set(c, 0, want.at(c, 0)-a.at(r, c)*x.at(r, 0))
				}
			}
			subtractTransposed(y.x(), a.x(), a.ld, x.x(), m, n)
			y.check(t, want, all)
		}
	})
}

// Vector registers 16 to 31 and all of 512 bits exist with AVX-512 only.
func TestNoWideRegisters(t *testing.T) {
	code, err := os.ReadFile("kernels_amd64.s")
	if err != nil {
		t.Fatal(err)
	}
	if at := regexp.MustCompile(`\b([XY](1[6-9]|2\d|3[01])|Z\d+|K[0-7])\b`).FindIndex(code); at != nil {
		t.Errorf("%s needs AVX-512", code[at[0]:at[1]])
	}
}
