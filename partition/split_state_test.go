package partition

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

// TestSplitStateKeepsCount makes random moves on every level and compares the
// running figures with a fresh count.
func TestSplitStateKeepsCount(t *testing.T) {
	rng := rand.New(rand.NewPCG(9, 0))
	edges := append(splitGrid(12, 12), splitGrid(12, 5)...)
	for range 300 {
		edges = append(edges, [2]int32{rng.Int32N(144), rng.Int32N(144)})
	}
	h := coarsen(newSplitGraph(144, edges), 12, nil, rng)
	if len(h.levels) < 3 {
		t.Fatalf("only %d levels", len(h.levels))
	}
	const k = 4
	for l, g := range h.levels {
		piece := make([]int32, g.n)
		for v := range piece {
			piece[v] = rng.Int32N(k)
		}
		s := newSplitState(g, piece, []int32{30, 40, 36, 36}, new(int64))
		for range 200 {
			v, to := rng.Int32N(int32(g.n)), rng.Int32N(k)
			if s.piece[v] == to {
				continue
			}
			joined := false
			for _, u := range g.adj[g.start[v]:g.start[v+1]] {
				joined = joined || s.piece[u] == to
			}
			gain, before := int64(0), s.cost()
			if joined {
				gain = s.gainTo(v, to)
			}
			s.move(v, to)
			if joined && before-s.cost() != gain {
				t.Fatalf("level %d: gain %d announced, %d made", l, gain, before-s.cost())
			}
			fresh := newSplitState(g, slices.Clone(s.piece), s.limit, new(int64))
			if fresh.boundary != s.boundary || fresh.cut != s.cut || fresh.excess != s.excess ||
				!slices.Equal(fresh.size, s.size) || !slices.Equal(fresh.outside, s.outside) {
				t.Fatalf("level %d: running figures differ from a fresh count", l)
			}
		}
		fine := slices.Clone(s.piece)
		for ; l > 0; l-- {
			down := make([]int32, h.levels[l-1].n)
			for v, c := range h.up[l-1] {
				down[v] = fine[c]
			}
			fine = down
		}
		if q := MeasureSplit(144, edges, fine); int64(q.Boundary) != s.boundary || int64(q.Cut) != s.cut {
			t.Fatalf("coarse figures %d, %d; fine ones %+v", s.boundary, s.cut, q)
		}
	}
}

// TestSplitDetachable compares the answer with a count of the parts that are
// left, on graphs with many cut vertices.
func TestSplitDetachable(t *testing.T) {
	rng := rand.New(rand.NewPCG(13, 0))
	var count [2]int
	for range 200 {
		n := 2 + rng.IntN(60)
		edges := splitRandomTree(n, 1+rng.IntN(3), rng)
		for range rng.IntN(n) {
			a := rng.IntN(n)
			edges = append(edges, [2]int32{int32(a), int32(min(n-1, a+rng.IntN(8)))})
		}
		effort := int64(1) << 40
		s := newSplitState(newSplitGraph(n, edges), make([]int32, n), make([]int32, 2), &effort)
		s.stamp = math.MaxInt32 - rng.Int32N(100) // passes the end of the numbers
		for v := range int32(n) {
			piece := make([]int32, n)
			piece[v] = 1
			want := splitPartsBySearch(n, edges, 2, piece)[0] == 1
			if got := s.detachable(v); got != want {
				t.Fatalf("vertex %d of %v: %v, want %v", v, edges, got, want)
			}
			if want {
				count[1]++
			} else {
				count[0]++
			}
		}
	}
	if min(count[0], count[1]) < 500 {
		t.Errorf("%v vertices of either kind prove little", count)
	}
}
