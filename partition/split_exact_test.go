package partition

import (
	"math/bits"
	"math/rand/v2"
	"slices"
	"testing"
)

// TestSplitTreeIsExact compares the verdict on small trees with all ways to
// cut k-1 edges; the verdict is exact, the boundary nearly always the lowest.
func TestSplitTreeIsExact(t *testing.T) {
	rng := rand.New(rand.NewPCG(7, 0))
	yes, no, best := 0, 0, 0
	for range 600 {
		n := 2 + rng.IntN(11)
		k := 1 + rng.IntN(1+n/2)
		edges := splitRandomTree(n, 1+rng.IntN(n), rng)
		possible, least := splitTreeByTrying(n, edges, k)
		piece, err := Split(n, edges, k, rng.Uint64())
		if (err == nil) != possible {
			t.Fatalf("n=%d k=%d %v: %v, possible %v", n, k, edges, err, possible)
		}
		if err != nil {
			no++
			continue
		}
		yes++
		b := checkSplit(t, n, edges, k, piece).Boundary
		if b == least {
			best++
		}
		if b > least+1 {
			t.Errorf("n=%d k=%d %v: %d boundary vertices, %d possible", n, k, edges, b, least)
		}
	}
	t.Logf("%d of %d splits are optimal, %d trees refused", best, yes, no)
	if best < yes*95/100 {
		t.Errorf("%d of %d splits are optimal", best, yes)
	}
	if yes < 100 || no < 100 {
		t.Fatalf("%d splits and %d refusals prove little", yes, no)
	}
}

// splitTreeByTrying cuts every choice of k-1 edges of a tree; least is the
// lowest number of boundary vertices among the balanced ones.
func splitTreeByTrying(n int, edges [][2]int32, k int) (possible bool, least int) {
	for choice := range uint(1) << len(edges) {
		if bits.OnesCount(choice) != k-1 {
			continue
		}
		piece := make([]int32, n)
		next := int32(0)
		for i, e := range edges { // parents come first, see splitRandomTree
			if choice>>i&1 == 1 {
				next++
				piece[e[1]] = next
			} else {
				piece[e[1]] = piece[e[0]]
			}
		}
		size := make([]int, k)
		for _, p := range piece {
			size[p]++
		}
		if slices.Max(size) > splitLimitOf(n, k) {
			continue
		}
		if b := MeasureSplit(n, edges, piece).Boundary; !possible || b < least {
			possible, least = true, b
		}
	}
	return possible, least
}

// TestSplitBranches splits bushy trees with a few closures: since the tree
// alone can be split, so can the graph, but which tree that was is not told.
func TestSplitBranches(t *testing.T) {
	rng := rand.New(rand.NewPCG(12, 0))
	possible, found := 0, 0
	for range 300 {
		n := 40 + rng.IntN(200)
		k := 2 + rng.IntN(7)
		edges := splitRandomTree(n, 1+rng.IntN(6), rng)
		if _, ok := cutTree(newSplitGraph(n, edges), k, int32(splitLimitOf(n, k)), rng); !ok {
			continue
		}
		possible++
		for range rng.IntN(20) {
			edges = append(edges, [2]int32{rng.Int32N(int32(n)), rng.Int32N(int32(n))})
		}
		piece, err := Split(n, edges, k, rng.Uint64())
		if err != nil {
			continue
		}
		found++
		checkSplit(t, n, edges, k, piece)
	}
	t.Logf("%d of %d split", found, possible)
	if possible < 100 || found < possible*98/100 {
		t.Errorf("%d of %d split", found, possible)
	}
}

// TestSplitSmallGraphs compares boundaries on small graphs with the best of
// all assignments.
func TestSplitSmallGraphs(t *testing.T) {
	rng := rand.New(rand.NewPCG(8, 0))
	found, optimal := 0, 0
	for range 150 {
		n := 4 + rng.IntN(6)
		k := 2 + rng.IntN(2)
		edges := splitRandomTree(n, 3, rng)
		for range rng.IntN(n) {
			edges = append(edges, [2]int32{rng.Int32N(int32(n)), rng.Int32N(int32(n))})
		}
		possible, least := splitByTrying(n, edges, k)
		piece, err := Split(n, edges, k, rng.Uint64())
		if (err == nil) != possible {
			t.Fatalf("n=%d k=%d %v: %v, possible %v", n, k, edges, err, possible)
		}
		if err != nil {
			continue
		}
		found++
		if checkSplit(t, n, edges, k, piece).Boundary == least {
			optimal++
		}
	}
	t.Logf("%d of %d splits are optimal", optimal, found)
	if found < 100 || optimal < found*95/100 {
		t.Errorf("%d of %d splits are optimal", optimal, found)
	}
}

func splitByTrying(n int, edges [][2]int32, k int) (possible bool, least int) {
	piece := make([]int32, n)
	size := make([]int, k)
	for {
		clear(size)
		for _, p := range piece {
			size[p]++
		}
		if slices.Min(size) > 0 && slices.Max(size) <= splitLimitOf(n, k) {
			if q := MeasureSplit(n, edges, piece); q.Connected && (!possible || q.Boundary < least) {
				possible, least = true, q.Boundary
			}
		}
		i := 0
		for ; i < n; i++ {
			if piece[i]++; int(piece[i]) < k {
				break
			}
			piece[i] = 0
		}
		if i == n {
			return possible, least
		}
	}
}
