package sparse

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// Any graph, any mixture of blocks, any set forced last, any order: the factor
// reproduces the matrix, and solving undoes multiplying.
func TestFactorReproducesMatrix(t *testing.T) {
	eachKernel(t, func(t *testing.T) {
		rapid.Check(t, func(t *rapid.T) {
			seed := rapid.Uint64().Draw(t, "seed")
			rng := rand.New(rand.NewPCG(seed, 1))
			n := rapid.IntRange(1, 300).Draw(t, "n")
			density := rapid.Float64Range(0, 3).Draw(t, "density")
			p := Pattern{mixed(rng, n), randomGraph(rng, n, density)}
			var last []int32
			for _, i := range rng.Perm(n)[:rapid.IntRange(0, min(n, 20)).Draw(t, "last")] {
				last = append(last, int32(i))
			}
			o := Options{Last: last, Ordering: Ordering(rapid.IntRange(0, 2).Draw(t, "ordering"))}
			s, err := Analyse(p, o)
			if err != nil {
				t.Fatal(err)
			}
			m, f := s.NewMatrix(), NewFactor(s)
			fill(rng, m, 1)
			x := randomVector(rng, s.Size())
			b, y := make([]float64, len(x)), make([]float64, len(x))
			m.Mul(x, b)
			if err := f.FactoriseSolve(m, b, y); err != nil {
				t.Fatal(err)
			}
			if d := relativeDifference(applyFactor(f, x), b); d > 1e-14 {
				t.Fatalf("|LL'x-Hx| = %g |Hx|", d)
			}
			if d := relativeDifference(y, x); d > 1e-10 {
				t.Fatalf("the solution is off by %g", d)
			}
		})
	})
}

func TestPublishedGraphs(t *testing.T) {
	for _, name := range []string{"intel", "manhattan3500", "parking-garage", "sphere2500", "generated-cube-1728"} {
		t.Run(name, func(t *testing.T) {
			p := published(t, name)
			eachKernel(t, func(t *testing.T) {
				s := mustAnalyse(t, p, Options{})
				m, f := s.NewMatrix(), NewFactor(s)
				fill(rand.New(rand.NewPCG(1, 2)), m, 0.1)
				x := randomVector(rand.New(rand.NewPCG(3, 4)), s.Size())
				b := make([]float64, s.Size())
				m.Mul(x, b)
				if err := f.Factorise(m); err != nil {
					t.Fatal(err)
				}
				if d := relativeDifference(applyFactor(f, x), b); d > 1e-14 {
					t.Errorf("|LL'x-Hx| = %g |Hx|", d)
				}
				// Columns of the inverse by solving, against the selected inverse.
				out := s.NewMatrix()
				f.SelectedInverse(out)
				i := s.Blocks() / 3
				d := int(s.dims[i])
				columns := make([]float64, d*s.Size())
				for c := range d {
					columns[c*s.Size()+s.Offset(i)+c] = 1
				}
				f.SolveMany(columns, d)
				for a := range d {
					want := columns[a*s.Size()+s.Offset(i):][:d]
					got := out.Diag(i)[a*d : (a+1)*d]
					if diff := relativeDifference(got, want); !(diff < 1e-11) {
						t.Errorf("row %d of the covariance is off by %g", a, diff)
					}
				}
			})
		})
	}
}

// What others may do with a symbolic analysis must not show in it.
func TestSymbolicKeepsNothingOfTheCaller(t *testing.T) {
	p := Pattern{uniform(25, 6), grid(5, 5)}
	o := Options{Last: []int32{3, 7}}
	s := mustAnalyse(t, p, o)
	m, f := s.NewMatrix(), NewFactor(s)
	fill(rand.New(rand.NewPCG(1, 2)), m, 1)
	before := randomVector(rand.New(rand.NewPCG(3, 4)), s.Size())
	after := slices.Clone(before)
	if err := f.FactoriseSolve(m, before, before); err != nil {
		t.Fatal(err)
	}
	clear(p.Dims)
	clear(p.Pairs)
	clear(o.Last)
	if err := f.FactoriseSolve(m, after, after); err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(before, after) || math.IsNaN(before[0]) {
		t.Error("the result depends on the caller's slices")
	}
}
