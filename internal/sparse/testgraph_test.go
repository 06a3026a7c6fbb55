package sparse

import (
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// graphs used by the tests; n block rows, edges without repeats.

func chain(n int) (pairs [][2]int32) {
	for i := 1; i < n; i++ {
		pairs = append(pairs, [2]int32{int32(i), int32(i - 1)})
	}
	return pairs
}

func grid(w, h int) (pairs [][2]int32) {
	for y := range h {
		for x := range w {
			i := int32(y*w + x)
			if x > 0 {
				pairs = append(pairs, [2]int32{i, i - 1})
			}
			if y > 0 {
				pairs = append(pairs, [2]int32{i - int32(w), i})
			}
		}
	}
	return pairs
}

func cube(w int) (pairs [][2]int32) {
	step := [3]int{1, w, w * w}
	for i := range w * w * w {
		for _, s := range step {
			if i/s%w > 0 {
				pairs = append(pairs, [2]int32{int32(i), int32(i - s)})
			}
		}
	}
	return pairs
}

// randomGraph draws edges; density 0 gives no edges at all.
func randomGraph(rng *rand.Rand, n int, perNode float64) (pairs [][2]int32) {
	seen := map[[2]int32]bool{}
	for range int(perNode * float64(n)) {
		i, j := rng.Int32N(int32(n)), rng.Int32N(int32(n))
		if i == j || seen[[2]int32{i, j}] || seen[[2]int32{j, i}] {
			continue
		}
		seen[[2]int32{i, j}] = true
		pairs = append(pairs, [2]int32{i, j})
	}
	return pairs
}

func tree(rng *rand.Rand, n int) (pairs [][2]int32) {
	for i := int32(1); i < int32(n); i++ {
		pairs = append(pairs, [2]int32{rng.Int32N(i), i})
	}
	return pairs
}

func uniform(n, d int) []int {
	dims := make([]int, n)
	for i := range dims {
		dims[i] = d
	}
	return dims
}

func mixed(rng *rand.Rand, n int) []int {
	dims := make([]int, n)
	for i := range dims {
		dims[i] = 3 + 3*rng.IntN(2)
	}
	return dims
}

// fill gives m the values of a sum of positive semidefinite pair terms, as a pose
// graph has, plus a small multiple of the identity.
func fill(rng *rand.Rand, m *Matrix, ridge float64) {
	m.Zero()
	s := m.s
	for k, q := range s.pairs {
		di, dj := int(s.dims[q[0]]), int(s.dims[q[1]])
		n := di + dj
		rows := max(di, dj)
		j := make([]float64, rows*n)
		for i := range j {
			j[i] = rng.NormFloat64()
		}
		at := func(a, b int) float64 {
			sum := 0.0
			for r := range rows {
				sum += j[r*n+a] * j[r*n+b]
			}
			return sum
		}
		for a := range di {
			for b := range di {
				m.Diag(int(q[0]))[a*di+b] += at(a, b)
			}
			for b := range dj {
				m.Off(k)[a*dj+b] = at(a, di+b)
			}
		}
		for a := range dj {
			for b := range dj {
				m.Diag(int(q[1]))[a*dj+b] += at(di+a, di+b)
			}
		}
	}
	for i, d := range s.dims {
		for a := range int(d) {
			m.Diag(i)[a*int(d)+a] += ridge
		}
	}
}

// dense returns the matrix in full.
func dense(m *Matrix) *mat.SymDense {
	s := m.s
	out := mat.NewSymDense(s.Size(), nil)
	put := func(i, j int32, h []float64) {
		for a := range int(s.dims[i]) {
			for b := range int(s.dims[j]) {
				out.SetSym(int(s.offset[i])+a, int(s.offset[j])+b, h[a*int(s.dims[j])+b])
			}
		}
	}
	for i := range s.dims {
		put(int32(i), int32(i), m.Diag(i))
	}
	for k, q := range s.pairs {
		put(q[0], q[1], m.Off(k))
	}
	return out
}

func mustAnalyse(tb testing.TB, p Pattern, o Options) *Symbolic {
	tb.Helper()
	s, err := Analyse(p, o)
	if err != nil {
		tb.Fatal(err)
	}
	return s
}
