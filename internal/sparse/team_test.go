package sparse

import (
	"errors"
	"math/rand/v2"
	"slices"
	"testing"
)

func spread(n, count int) (last []int32) {
	for i := range count {
		last = append(last, int32(i*n/count))
	}
	return last
}

// twice returns two copies of a graph of n vertices, side by side.
func twice(pairs [][2]int32, n int32) (both [][2]int32) {
	for _, q := range pairs {
		both = append(both, q, [2]int32{q[1] + n, q[0] + n})
	}
	return both
}

// numbers returns the entries of L front by front.
func (f *Factor) numbers() (v []float64) {
	for i := range f.s.fronts {
		t := &f.s.fronts[i]
		for c := range t.k {
			v = append(v, f.val[t.d+c*t.ldd+c:t.d+c*t.ldd+t.k]...)
			v = append(v, f.val[t.b+c*t.ldr:t.b+c*t.ldr+t.r]...)
		}
	}
	return v
}

// Two workers must give the bits of one, also where the matrix is indefinite.
func TestWorkersAgree(t *testing.T) { eachKernel(t, testWorkersAgree) }

func testWorkersAgree(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for _, c := range []struct {
		name string
		p    Pattern
		last []int32
	}{
		{"cube", Pattern{uniform(729, 6), cube(9)}, nil},
		{"cube-mixed-last", Pattern{mixed(rng, 729), cube(9)}, spread(729, 30)},
		{"grid", Pattern{uniform(3600, 3), grid(60, 60)}, nil},
		{"grid-last", Pattern{uniform(3600, 3), grid(60, 60)}, spread(3600, 40)},
		{"two-grids", Pattern{uniform(4050, 6), twice(grid(45, 45), 2025)}, nil},
		{"chain", Pattern{uniform(22000, 6), chain(22000)}, nil},
	} {
		t.Run(c.name, func(t *testing.T) {
			var f [2]*Factor
			var x, y [2][]float64
			var m, inverse [2]*Matrix
			for k := range f {
				s := mustAnalyse(t, c.p, Options{Last: c.last, Workers: k + 1})
				if s.workers != k+1 {
					t.Fatalf("the graph is too small: %g operations", s.flops)
				}
				f[k] = NewFactor(s)
				m[k] = s.NewMatrix()
				fill(rand.New(rand.NewPCG(3, 4)), m[k], 0.1)
				b := randomVector(rand.New(rand.NewPCG(5, 6)), s.Size())
				x[k], y[k] = make([]float64, s.Size()), make([]float64, s.Size())
				if err := f[k].Reduce(m[k], b); err != nil {
					t.Fatal(err)
				}
				f[k].Expand(y[k])
				if err := f[k].FactoriseSolve(m[k], b, x[k]); err != nil {
					t.Fatal(err)
				}
				f[k].Solve(b, b)
				if !slices.Equal(b, x[k]) {
					t.Errorf("%d workers: Solve and FactoriseSolve differ", k+1)
				}
				inverse[k] = s.NewMatrix()
				f[k].SelectedInverse(inverse[k])
			}
			if !slices.Equal(f[0].numbers(), f[1].numbers()) {
				t.Error("factors differ")
			}
			if !slices.Equal(x[0], x[1]) || !slices.Equal(y[0], y[1]) {
				t.Error("solutions differ")
			}
			if !slices.Equal(f[0].schur, f[1].schur) || !slices.Equal(f[0].reduced, f[1].reduced) {
				t.Error("Schur complements differ")
			}
			if !slices.Equal(inverse[0].data, inverse[1].data) {
				t.Error("selected inverses differ")
			}
			for range 20 {
				var e [2]*NotPositiveError
				bad := [2]int{rng.IntN(f[0].s.Blocks()), rng.IntN(f[0].s.Blocks())}
				for k := range f {
					var before [2]float64
					for a, i := range bad {
						before[a], m[k].Diag(i)[0] = m[k].Diag(i)[0], -1
					}
					if err := f[k].Factorise(m[k]); !errors.As(err, &e[k]) {
						t.Fatalf("blocks %v negative: got %v", bad, err)
					}
					m[k].Diag(bad[1])[0] = before[1]
					m[k].Diag(bad[0])[0] = before[0]
				}
				if *e[0] != *e[1] {
					t.Fatalf("blocks %v negative: one worker says %v, two say %v", bad, e[0], e[1])
				}
			}
		})
	}
}
