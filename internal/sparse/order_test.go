package sparse

import (
	"math/rand/v2"
	"slices"
	"testing"
)

func checkPermutation(t *testing.T, order []int32, n int) {
	t.Helper()
	sorted := slices.Sorted(slices.Values(order))
	for i, v := range sorted {
		if v != int32(i) {
			t.Fatalf("not a permutation: %d at %d", v, i)
		}
	}
	if len(sorted) != n {
		t.Fatalf("%d of %d vertices", len(sorted), n)
	}
}

// exactDegrees eliminates in the given order on the filled graph and returns the
// degree of each pivot.
func exactDegrees(n int, pairs [][2]int32, order []int32) (degrees []int) {
	adjacent := make([]map[int32]bool, n)
	for i := range adjacent {
		adjacent[i] = map[int32]bool{}
	}
	for _, q := range pairs {
		adjacent[q[0]][q[1]], adjacent[q[1]][q[0]] = true, true
	}
	for _, v := range order {
		degrees = append(degrees, len(adjacent[v]))
		for a := range adjacent[v] {
			delete(adjacent[a], v)
			for b := range adjacent[v] {
				if a != b {
					adjacent[a][b] = true
				}
			}
		}
	}
	return degrees
}

// The counts of the elimination forest must be those of brute-force elimination.
func TestForestCounts(t *testing.T) {
	for _, c := range testCases() {
		g, err := newGraph(c.p)
		if err != nil {
			t.Fatal(err)
		}
		n := len(c.p.Dims)
		for _, order := range [][]int32{
			minimumDegree(g, make([]bool, n), false),
			minimumDegree(g, make([]bool, n), true),
			nestedDissection(g, make([]bool, n)),
		} {
			f := newForest(g, order, n)
			checkPermutation(t, f.order, n)
			for j, d := range exactDegrees(n, c.p.Pairs, f.order) {
				if int(f.below[j]) != d {
					t.Fatalf("%s: column %d has %d blocks below, want %d", c.name, j, f.below[j], d)
				}
			}
		}
	}
}

// Trees fill nothing in minimum degree order.
func TestMinimumDegreeTree(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for trial := range 50 {
		n := 2 + rng.IntN(60)
		pairs := tree(rng, n)
		if trial == 0 { // a star, with a hub
			n = 1000
			pairs = pairs[:0]
			for i := range int32(n - 1) {
				pairs = append(pairs, [2]int32{i + 1, 0})
			}
			if !isHub(n-1, n) {
				t.Fatal("the star is too small")
			}
		}
		g, err := newGraph(Pattern{uniform(n, 3), pairs})
		if err != nil {
			t.Fatal(err)
		}
		order := minimumDegree(g, make([]bool, n), n%2 == 0)
		checkPermutation(t, order, n)
		for _, d := range exactDegrees(n, pairs, order) {
			if d > 1 {
				t.Fatalf("a tree of %d vertices fills in", n)
			}
		}
	}
}

// A grid cut in two needs about its width, a cube its face.
func TestBisect(t *testing.T) {
	for _, c := range []struct {
		name  string
		n     int
		pairs [][2]int32
		most  int32
	}{
		{"grid", 3600, grid(60, 60), 66},
		{"cube", 1728, cube(12), 158},
		{"two pieces", 4050, twice(grid(45, 45), 2025), 0},
	} {
		g, err := newGraph(Pattern{uniform(c.n, 3), c.pairs})
		if err != nil {
			t.Fatal(err)
		}
		l := &level{graph: *g, edge: make([]int32, len(g.adj)), total: int32(c.n)}
		for i := range l.edge {
			l.edge[i] = 1
		}
		side := bisect(l, rand.New(rand.NewPCG(1, 2)))
		var sizes [3]int32
		for i, s := range side {
			sizes[s]++
			for _, u := range l.neighbours(int32(i)) {
				if s != separator && side[u] == 1-s {
					t.Fatalf("%s: an edge joins the sides", c.name)
				}
			}
		}
		if sizes[separator] > c.most || max(sizes[0], sizes[1]) > int32(0.61*float64(c.n)) {
			t.Errorf("%s: parts of %v, want a separator of at most %d", c.name, sizes, c.most)
		}
	}
}

// renamed gives the vertices other numbers.
func renamed(n int, pairs [][2]int32) [][2]int32 {
	name := shuffled(n, rand.New(rand.NewPCG(1, 2)))
	for k, q := range pairs {
		pairs[k] = [2]int32{name[q[0]], name[q[1]]}
	}
	return pairs
}

// Auto must not be worse than minimum degree, and take a dissection where that
// saves much.
func TestOrderings(t *testing.T) {
	for _, c := range []struct {
		name  string
		p     Pattern
		gains bool
	}{
		{"cube", Pattern{uniform(2197, 6), renamed(2197, cube(13))}, true},
		{"chain", Pattern{uniform(5000, 6), chain(5000)}, false},
	} {
		var flops [3]float64
		for o := range flops {
			s := mustAnalyse(t, c.p, Options{Ordering: Ordering(o)})
			again := mustAnalyse(t, c.p, Options{Ordering: Ordering(o)})
			if !slices.Equal(s.order, again.order) {
				t.Errorf("%s: ordering %d differs from run to run", c.name, o)
			}
			flops[o] = s.Flops()
		}
		if flops[Auto] > flops[MinimumDegree] || c.gains != (flops[Auto] < flops[MinimumDegree]) {
			t.Errorf("%s: auto needs %.3g operations, minimum degree %.3g", c.name, flops[Auto], flops[MinimumDegree])
		}
	}
}

func TestRefusedPatterns(t *testing.T) {
	for _, c := range []struct {
		name string
		p    Pattern
		o    Options
	}{
		{"block of 4", Pattern{Dims: []int{3, 4}}, Options{}},
		{"block of 0", Pattern{Dims: []int{0}}, Options{}},
		{"pair out of range", Pattern{Dims: []int{3, 3}, Pairs: [][2]int32{{0, 2}}}, Options{}},
		{"negative pair", Pattern{Dims: []int{3, 3}, Pairs: [][2]int32{{-1, 0}}}, Options{}},
		{"pair on the diagonal", Pattern{Dims: []int{3, 3}, Pairs: [][2]int32{{1, 1}}}, Options{}},
		{"pair twice", Pattern{Dims: []int{3, 3}, Pairs: [][2]int32{{0, 1}, {0, 1}}}, Options{}},
		{"pair twice, turned", Pattern{Dims: []int{3, 3}, Pairs: [][2]int32{{0, 1}, {1, 0}}}, Options{}},
		{"last out of range", Pattern{Dims: []int{3, 3}}, Options{Last: []int32{2}}},
		{"last twice", Pattern{Dims: []int{3, 3}}, Options{Last: []int32{1, 1}}},
		{"three workers", Pattern{Dims: []int{3}}, Options{Workers: 3}},
		{"too dense", Pattern{Dims: uniform(10000, 6)}, Options{Last: shuffled(10000, rand.New(rand.NewPCG(1, 2)))}},
		{"unknown ordering", Pattern{Dims: []int{3}}, Options{Ordering: 7}},
	} {
		if s, err := Analyse(c.p, c.o); err == nil || s != nil {
			t.Errorf("%s: accepted", c.name)
		}
	}
	s, err := Analyse(Pattern{}, Options{})
	if err != nil || s.Size() != 0 {
		t.Fatalf("empty pattern: %v", err)
	}
	if err := NewFactor(s).FactoriseSolve(s.NewMatrix(), nil, nil); err != nil {
		t.Fatal(err)
	}
}
