package partition

import "math/rand/v2"

// cutTree splits a spanning tree of the graph, drawn at random by depth-first
// search from root, into k connected pieces of at most limit poses. The number of pieces
// it needs at the least is found by cutting off the heaviest branches from the
// leaves up (Kundu and Misra, A Linear Tree Partitioning Algorithm, SIAM J.
// Comput. 6(1), 1977), so for this tree, and for a graph that is a tree, a
// refusal is a proof. Pieces are then halved until there are k.
func cutTree(g *splitGraph, k int, limit int32, rng *rand.Rand) (piece []int32, ok bool) {
	t := growTree(g, rng)
	t.cutHeavy(limit)
	pieces := 0
	for _, c := range t.cut {
		if c {
			pieces++
		}
	}
	if pieces > k {
		return nil, false
	}
	for ; pieces < k; pieces++ {
		t.halve()
	}
	piece = make([]int32, g.n)
	next := int32(0)
	for _, v := range t.order {
		if t.cut[v] {
			piece[v] = next
			next++
		} else {
			piece[v] = piece[t.parent[v]]
		}
	}
	return piece, true
}

// splitTree is a rooted spanning tree; cut tells which vertices are the tops
// of their pieces, the root being always one.
type splitTree struct {
	order  []int32 // parents before children
	parent []int32 // -1 for the root
	cut    []bool
	below  []int32 // scratch: poses hanging on a vertex within its piece, itself included
	top    []int32 // scratch: top of the piece of a vertex
}

func growTree(g *splitGraph, rng *rand.Rand) *splitTree {
	t := &splitTree{
		order:  make([]int32, 0, g.n),
		parent: make([]int32, g.n),
		cut:    make([]bool, g.n),
		below:  make([]int32, g.n),
		top:    make([]int32, g.n),
	}
	offset := make([]int32, g.n) // where the search starts in each neighbour list
	done := make([]int32, g.n)   // neighbours tried so far
	for v := range int32(g.n) {
		t.parent[v] = -2
		if d := g.start[v+1] - g.start[v]; d > 0 {
			offset[v] = rng.Int32N(d)
		}
	}
	root := rng.Int32N(int32(g.n))
	t.parent[root] = -1
	t.order = append(t.order, root)
	for v := root; v >= 0; {
		d := g.start[v+1] - g.start[v]
		if done[v] == d {
			v = t.parent[v]
			continue
		}
		u := g.adj[g.start[v]+(offset[v]+done[v])%d]
		done[v]++
		if t.parent[u] == -2 {
			t.parent[u] = v
			t.order = append(t.order, u)
			v = u
		}
	}
	return t
}

// cutHeavy makes the fewest cuts that leave no piece above limit.
func (t *splitTree) cutHeavy(limit int32) {
	n := len(t.order)
	childStart := make([]int32, n+1)
	for _, v := range t.order[1:] {
		childStart[t.parent[v]+1]++
	}
	for v := range n {
		childStart[v+1] += childStart[v]
	}
	children := make([]int32, n-1)
	fill := append([]int32(nil), childStart[:n]...)
	for _, v := range t.order[1:] {
		p := t.parent[v]
		children[fill[p]] = v
		fill[p]++
	}
	heap := newSplitHeap(n)
	for i := n - 1; i >= 0; i-- {
		v := t.order[i]
		sum := int32(1)
		heap.reset()
		for _, c := range children[childStart[v]:childStart[v+1]] {
			sum += t.below[c]
			heap.set(c, int64(t.below[c]))
		}
		for sum > limit {
			c, _, _ := heap.pop()
			t.cut[c] = true
			sum -= t.below[c]
		}
		t.below[v] = sum
	}
	t.cut[t.order[0]] = true
}

// halve cuts the largest piece as evenly as one cut can.
func (t *splitTree) halve() {
	n := len(t.order)
	for i := n - 1; i >= 0; i-- {
		t.below[t.order[i]] = 1
	}
	for i := n - 1; i > 0; i-- {
		if v := t.order[i]; !t.cut[v] {
			t.below[t.parent[v]] += t.below[v]
		}
	}
	largest := t.order[0]
	for _, v := range t.order {
		if t.cut[v] {
			t.top[v] = v
			if t.below[v] > t.below[largest] {
				largest = v
			}
		} else {
			t.top[v] = t.top[t.parent[v]]
		}
	}
	best, bestSize := int32(-1), int32(0)
	for _, v := range t.order {
		if t.top[v] == largest && v != largest {
			if size := max(t.below[v], t.below[largest]-t.below[v]); best < 0 || size < bestSize {
				best, bestSize = v, size
			}
		}
	}
	t.cut[best] = true
}
