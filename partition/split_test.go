package partition

import (
	"errors"
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"pgregory.net/rapid"
)

func TestSplitPath(t *testing.T) {
	for _, n := range []int{1, 2, 3, 7, 10, 100, 1000} {
		for _, k := range []int{1, 2, 3, 4, 7, 16, n - 1, n} {
			if k < 1 || k > n {
				continue
			}
			edges := splitPath(n)
			piece, err := Split(n, edges, k, 3)
			if err != nil {
				t.Fatalf("n=%d k=%d: %v", n, k, err)
			}
			q := checkSplit(t, n, edges, k, piece)
			if q.Cut != k-1 {
				t.Errorf("n=%d k=%d: cut %d, a path needs %d", n, k, q.Cut, k-1)
			}
		}
	}
}

func TestSplitGridReachesKnownBoundary(t *testing.T) {
	// A straight line across the grid is the best cut into halves; a border of
	// w edges touches 2w vertices. Cutting off corners can only be better.
	for _, c := range []struct{ w, h, k, boundary int }{
		{10, 20, 2, 20}, {20, 40, 2, 40}, {30, 60, 2, 60}, {8, 64, 4, 48}, {8, 128, 8, 112}, {30, 30, 4, 118}, {60, 60, 4, 238},
	} {
		edges := splitGrid(c.w, c.h)
		piece, err := Split(c.w*c.h, edges, c.k, 5)
		if err != nil {
			t.Fatal(err)
		}
		if q := checkSplit(t, c.w*c.h, edges, c.k, piece); q.Boundary > c.boundary {
			t.Errorf("%d x %d in %d: %d boundary vertices, straight lines need %d", c.w, c.h, c.k, q.Boundary, c.boundary)
		}
	}
}

func TestSplitDense(t *testing.T) {
	rng := rand.New(rand.NewPCG(11, 0))
	for _, c := range []struct {
		n, k int
		p    float64
	}{{40, 5, 1}, {100, 7, 0.5}, {300, 16, 0.2}} {
		var edges [][2]int32
		for a := range int32(c.n) {
			for b := range a {
				if b == a-1 || rng.Float64() < c.p {
					edges = append(edges, [2]int32{a, b})
				}
			}
		}
		piece, err := Split(c.n, edges, c.k, 1)
		if err != nil {
			t.Fatalf("n=%d k=%d: %v", c.n, c.k, err)
		}
		checkSplit(t, c.n, edges, c.k, piece)
	}
}

func TestSplitRefuses(t *testing.T) {
	apart := append(splitPath(10), [2]int32{11, 12}, [2]int32{11, 11})
	spider := [][2]int32{} // a hub with 5 legs of 4: halves cannot be equal
	for leg := range int32(5) {
		spider = append(spider, [2]int32{0, 1 + 4*leg})
		for i := range int32(3) {
			spider = append(spider, [2]int32{1 + 4*leg + i, 2 + 4*leg + i})
		}
	}
	nearStar := append(splitStar(2000), [2]int32{1, 2}, [2]int32{3, 4})
	for _, c := range []struct {
		name    string
		n       int
		edges   [][2]int32
		k       int
		noSplit bool
		want    string
	}{
		{"no pieces", 10, splitPath(10), 0, false, "split: 0 pieces of 10 vertices asked for, 1 to 10 expected"},
		{"too many pieces", 10, splitPath(10), 11, false, "split: 11 pieces of 10 vertices asked for, 1 to 10 expected"},
		{"nothing", 0, nil, 1, false, "split: 1 pieces of 0 vertices asked for, 1 to 0 expected"},
		{"negative", -1, nil, 1, false, "split: -1 vertices and 0 edges, at most 1073741823 of each expected"},
		{"edge too high", 3, [][2]int32{{0, 1}, {1, 3}}, 1, false, "split: edge 1 joins 1 and 3, numbers from 0 to 2 expected"},
		{"edge below", 3, [][2]int32{{-1, 1}}, 1, false, "split: edge 0 joins -1 and 1, numbers from 0 to 2 expected"},
		{"apart", 13, apart, 2, false, "split: the graph falls into 3 parts that nothing joins, the largest of [10 2 1] vertices; one part expected"},
		{"star", 2000, splitStar(2000), 4, true, ""},
		{"nearly a star", 2000, nearStar, 4, true, ""},
		{"spider", 21, spider, 2, true, ""},
	} {
		piece, err := Split(c.n, c.edges, c.k, 1)
		switch {
		case err == nil || piece != nil:
			t.Errorf("%s: accepted", c.name)
		case errors.Is(err, ErrNoSplit) != c.noSplit:
			t.Errorf("%s: %v", c.name, err)
		case c.want != "" && err.Error() != c.want:
			t.Errorf("%s: %q, want %q", c.name, err, c.want)
		}
	}
}

// TestSplitProperties splits random walks with closures, the shape of a pose
// graph, and asks the same again, with the seed and with the vertices renamed.
func TestSplitProperties(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(2, 300).Draw(t, "n")
		k := rapid.IntRange(1, min(n, 12)).Draw(t, "k")
		seed := rapid.Uint64().Draw(t, "seed")
		rng := rand.New(rand.NewPCG(seed, 1))
		edges := splitPath(n)
		for range rapid.IntRange(0, n).Draw(t, "closures") {
			a := rng.IntN(n)
			edges = append(edges, [2]int32{int32(a), int32(min(n-1, a+rng.IntN(40)))})
		}
		piece, err := Split(n, edges, k, seed)
		if err != nil {
			t.Fatal(err) // a path through all vertices can always be cut evenly
		}
		checkSplitRapid(t, n, edges, k, piece)
		again, err := Split(n, slices.Clone(edges), k, seed)
		if err != nil || !slices.Equal(piece, again) {
			t.Fatalf("not the same again: %v", err)
		}
	})
}

func checkSplitRapid(t *rapid.T, n int, edges [][2]int32, k int, piece []int32) {
	q := MeasureSplit(n, edges, piece)
	if len(piece) != n || q.Pieces != k || !q.Connected || q.Balance > float64(splitLimitOf(n, k)*k)/float64(n)+1e-12 {
		t.Fatalf("%+v for n=%d k=%d", q, n, k)
	}
	if k > 1 && (q.Boundary < 2 || q.Cut < k-1 || q.BoundaryLargest > q.Boundary) {
		t.Fatalf("impossible figures %+v", q)
	}
}

// TestSplitRelabelling renames the vertices of a published set and of a grid:
// the boundary may change by chance only.
func TestSplitRelabelling(t *testing.T) {
	n, edges := splitDataset(t, "manhattan3500")
	for _, c := range []struct {
		name  string
		n     int
		edges [][2]int32
	}{{"manhattan3500", n, edges}, {"grid", 1200, splitGrid(30, 40)}} {
		piece, err := Split(c.n, c.edges, 8, 1)
		if err != nil {
			t.Fatal(err)
		}
		base := checkSplit(t, c.n, c.edges, 8, piece).Boundary
		rng := rand.New(rand.NewPCG(2, 0))
		for range 4 {
			name := splitOrder(c.n, rng)
			renamed := make([][2]int32, len(c.edges))
			for i, e := range c.edges {
				renamed[i] = [2]int32{name[e[1]], name[e[0]]}
			}
			rng.Shuffle(len(renamed), func(i, j int) { renamed[i], renamed[j] = renamed[j], renamed[i] })
			piece, err := Split(c.n, renamed, 8, 1)
			if err != nil {
				t.Fatal(err)
			}
			if b := checkSplit(t, c.n, renamed, 8, piece).Boundary; float64(b) > 1.15*float64(base) || float64(b) < float64(base)/1.15 {
				t.Errorf("%s: %d boundary vertices, %d after renaming", c.name, base, b)
			}
		}
	}
}

func TestMeasureSplit(t *testing.T) {
	// Two triangles joined by a double edge, and a vertex of piece 0 on the far side.
	edges := [][2]int32{{0, 1}, {1, 2}, {2, 0}, {3, 4}, {4, 5}, {5, 3}, {2, 3}, {3, 2}, {5, 6}, {6, 6}}
	got := MeasureSplit(7, edges, []int32{0, 0, 0, 1, 1, 1, 0})
	want := SplitQuality{Pieces: 2, Connected: false, Cut: 3, Balance: 8.0 / 7, Boundary: 4, BoundaryLargest: 2}
	if got != want {
		t.Errorf("%+v, want %+v", got, want)
	}
}

func BenchmarkSplit(b *testing.B) {
	for _, set := range []string{"city10000", "cubicle-block", "intel"} {
		n, edges := splitDataset(b, set)
		for _, k := range []int{2, 16} {
			b.Run(fmt.Sprintf("%s/k=%d", set, k), func(b *testing.B) {
				b.ReportAllocs()
				boundary := 0
				for b.Loop() {
					piece, err := Split(n, edges, k, 1)
					if err != nil {
						b.Fatal(err)
					}
					boundary = MeasureSplit(n, edges, piece).Boundary
				}
				b.ReportMetric(float64(boundary), "boundary")
			})
		}
	}
}

// TestSplitIsPrompt guards against a search that does not end: the hardest
// shapes for it, with a bound far above what they take.
func TestSplitIsPrompt(t *testing.T) {
	rng := rand.New(rand.NewPCG(10, 0))
	for _, c := range []struct {
		name  string
		n     int
		edges [][2]int32
		k     int
	}{
		{"star", 20000, splitStar(20000), 16},
		{"wheel", 5000, append(splitStar(5000), splitPath(5000)...), 16},
		{"bushy tree", 20000, splitRandomTree(20000, 20000, rng), 16},
		{"lean tree", 20000, splitRandomTree(20000, 4, rng), 16},
		{"many pieces", 4000, splitGrid(50, 80), 1000},
	} {
		begin := time.Now()
		piece, err := Split(c.n, c.edges, c.k, 1)
		if err == nil {
			checkSplit(t, c.n, c.edges, c.k, piece)
		} else if !errors.Is(err, ErrNoSplit) {
			t.Errorf("%s: %v", c.name, err)
		}
		took := time.Since(begin)
		t.Logf("%-12s %v %v", c.name, took.Round(time.Millisecond), err)
		if took > 30*time.Second {
			t.Errorf("%s took %v", c.name, took)
		}
	}
}
