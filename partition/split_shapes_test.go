package partition

import (
	"math/rand/v2"
	"slices"
	"testing"
)

// splitLimitOf is the promised size of the largest piece, in exact numbers.
func splitLimitOf(n, k int) int { return max((n+k-1)/k, n*103/(100*k)) }

// checkSplit fails unless piece is what Split promises.
func checkSplit(t testing.TB, n int, edges [][2]int32, k int, piece []int32) SplitQuality {
	t.Helper()
	if len(piece) != n {
		t.Fatalf("%d entries for %d vertices", len(piece), n)
	}
	size := make([]int, k)
	for v, p := range piece {
		if p < 0 || int(p) >= k {
			t.Fatalf("vertex %d in piece %d of %d", v, p, k)
		}
		size[p]++
	}
	if slices.Min(size) == 0 {
		t.Fatalf("empty piece: sizes %v", size)
	}
	if slices.Max(size) > splitLimitOf(n, k) {
		t.Fatalf("sizes %v, at most %d allowed", size, splitLimitOf(n, k))
	}
	for p, c := range splitPartsBySearch(n, edges, k, piece) {
		if c != 1 {
			t.Fatalf("piece %d lies in %d parts", p, c)
		}
	}
	return MeasureSplit(n, edges, piece)
}

// splitPartsBySearch counts the connected parts of each piece by spreading
// labels along the edges until nothing changes.
func splitPartsBySearch(n int, edges [][2]int32, k int, piece []int32) []int {
	label := make([]int, n)
	for v := range label {
		label[v] = v
	}
	for changed := true; changed; {
		changed = false
		for _, e := range edges {
			a, b := e[0], e[1]
			if piece[a] == piece[b] && label[a] != label[b] {
				m := min(label[a], label[b])
				label[a], label[b] = m, m
				changed = true
			}
		}
	}
	parts := make([]int, k)
	for v, l := range label {
		if l == v {
			parts[piece[v]]++
		}
	}
	return parts
}

func splitPath(n int) (edges [][2]int32) {
	for v := 1; v < n; v++ {
		edges = append(edges, [2]int32{int32(v - 1), int32(v)})
	}
	return edges
}

func splitGrid(w, h int) (edges [][2]int32) {
	for y := range h {
		for x := range w {
			v := int32(y*w + x)
			if x+1 < w {
				edges = append(edges, [2]int32{v, v + 1})
			}
			if y+1 < h {
				edges = append(edges, [2]int32{v, v + int32(w)})
			}
		}
	}
	return edges
}

func splitStar(n int) (edges [][2]int32) {
	for v := 1; v < n; v++ {
		edges = append(edges, [2]int32{0, int32(v)})
	}
	return edges
}

// splitRandomTree hangs each vertex on one of the reach before it.
func splitRandomTree(n, reach int, rng *rand.Rand) (edges [][2]int32) {
	for v := 1; v < n; v++ {
		edges = append(edges, [2]int32{int32(v - 1 - rng.IntN(min(v, reach))), int32(v)})
	}
	return edges
}
