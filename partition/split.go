package partition

import (
	"errors"
	"fmt"
	"math"
	"math/bits"
	"math/rand/v2"
	"slices"
)

// ErrNoSplit is the reason when no balanced split into connected pieces was
// found. For a tree, such as a star, it is proved that there is none.
var ErrNoSplit = errors.New("no split into connected pieces of near equal size found")

// Split assigns each of the n vertices of a connected graph to one of k
// pieces, numbered from 0. Each piece is connected, and none has more than
// 1.03 n/k vertices, or n/k rounded up where that is more. Within these bounds
// it looks for few boundary vertices (those with an edge to another piece),
// then for few edges between pieces. Edges have no direction; repeated ones
// count as often as they are given, self loops do not count. Equal arguments
// give equal results.
//
// It fails when k is below 1 or above n, an edge has an end outside 0 up to n,
// the graph is not connected, or no such split is found (ErrNoSplit).
//
// The method is multilevel: the graph is contracted step by step, the coarsest
// is split by growing pieces, and the split is carried back and improved by
// local moves on every level. All moves keep the pieces connected. Several
// such splits are made; then pairs of them are combined by contracting only
// what both hold together (Sanders and Schulz, Distributed Evolutionary Graph
// Partitioning, ALENEX 2012), which keeps the better parts of either.
func Split(n int, edges [][2]int32, k int, seed uint64) (piece []int32, err error) {
	if n < 0 || n > math.MaxInt32/2 || len(edges) > math.MaxInt32/2 {
		return nil, fmt.Errorf("split: %d vertices and %d edges, at most %d of each expected", n, len(edges), math.MaxInt32/2)
	}
	if k < 1 || k > n {
		return nil, fmt.Errorf("split: %d pieces of %d vertices asked for, 1 to %d expected", k, n, n)
	}
	for i, e := range edges {
		if min(e[0], e[1]) < 0 || int(max(e[0], e[1])) >= n {
			return nil, fmt.Errorf("split: edge %d joins %d and %d, numbers from 0 to %d expected", i, e[0], e[1], n-1)
		}
	}
	g := newSplitGraph(n, edges)
	if sizes := g.components(); len(sizes) > 1 {
		slices.SortFunc(sizes, func(a, b int) int { return b - a })
		return nil, fmt.Errorf("split: the graph falls into %d parts that nothing joins, the largest of %v vertices; one part expected",
			len(sizes), sizes[:min(len(sizes), 8)])
	}
	if k == 1 {
		return make([]int32, n), nil
	}
	limit := int32(max((n+k-1)/k, int(int64(n)*103/(int64(k)*100))))
	sp := &splitter{
		g: g, k: k, limit: limit,
		rng:    rand.New(rand.NewPCG(seed, 0x73706c6974)),
		effort: splitEffort * int64(n+len(g.adj)) * int64(bits.Len(uint(k))),
	}
	best := sp.search()
	if best == nil {
		return nil, fmt.Errorf("split: %d vertices, %d pieces of at most %d: %w", n, k, limit, ErrNoSplit)
	}
	return best.piece, nil
}

// splitter searches for splits of one graph.
type splitter struct {
	g      *splitGraph
	k      int
	limit  int32
	rng    *rand.Rand
	effort int64 // entries of the graphs that may still be looked at
}

// splitCandidate is a split of the finest level within the limit.
type splitCandidate struct {
	piece []int32
	cost  int64
}

const (
	splitCandidates = 6  // splits made from scratch
	splitTrees      = 50 // spanning trees tried when all of those fail
	splitCombines   = 12 // combinations tried afterwards

	// splitEffort bounds the search to this many looks at every vertex and
	// edge, times the binary digits of k: several times what pose graphs need.
	// It keeps graphs with hubs, where single steps are long, from taking
	// hours. When it is used up the best split so far is taken.
	splitEffort = 2000
)

// search returns the best split found, or nil.
func (sp *splitter) search() *splitCandidate {
	if len(sp.g.adj) == 2*(sp.g.n-1) {
		if _, ok := cutTree(sp.g, sp.k, sp.limit, sp.rng); !ok {
			return nil
		}
	}
	var pool []*splitCandidate
	for range splitCandidates {
		c := sp.fromScratch()
		if c == nil {
			c = sp.fromTree()
		}
		if c != nil {
			pool = append(pool, c)
		}
	}
	for try := 0; try < splitTrees && len(pool) == 0; try++ {
		if c := sp.fromTree(); c != nil {
			pool = append(pool, c)
		}
	}
	if len(pool) == 0 {
		return nil
	}
	byCost := func(a, b *splitCandidate) int {
		switch {
		case a.cost < b.cost:
			return -1
		case a.cost > b.cost:
			return 1
		}
		return 0
	}
	slices.SortStableFunc(pool, byCost)
	for range splitCombines {
		i, j := sp.rng.IntN(len(pool)), sp.rng.IntN(len(pool))
		c := sp.combine(pool[min(i, j)], pool[max(i, j)])
		if c == nil {
			continue
		}
		last := len(pool) - 1
		if c.cost < pool[last].cost {
			pool[last] = c
			slices.SortStableFunc(pool, byCost)
		}
	}
	return pool[0]
}

// coarsest is the number of vertices at which contraction ends.
func (sp *splitter) coarsest() int { return max(64, 24*sp.k) }

// limits returns the limits of the pieces on level g, where a vertex may stand
// for several poses: room for one such vertex is added, and taken back below.
func (sp *splitter) limits(g *splitGraph) []int32 {
	limits := make([]int32, sp.k)
	for p := range limits {
		limits[p] = sp.limit + g.maxWeight - 1
	}
	return limits
}

func (sp *splitter) fromScratch() *splitCandidate {
	h := coarsen(sp.g, sp.coarsest(), nil, sp.rng)
	top := h.levels[len(h.levels)-1]
	s := growPieces(top, sp.k, sp.limit, &sp.effort, sp.rng)
	if s == nil {
		return nil
	}
	s.setLimits(sp.limits(top))
	return sp.refineDown(h, s)
}

// fromTree splits a spanning tree, for graphs with so many branches that local
// moves do not bring every piece within its limit.
func (sp *splitter) fromTree() *splitCandidate {
	piece, ok := cutTree(sp.g, sp.k, sp.limit, sp.rng)
	if !ok {
		return nil
	}
	return sp.polish(newSplitState(sp.g, piece, sp.limits(sp.g), &sp.effort))
}

// combine improves the better split on levels that contract nothing which
// either of the two cuts.
func (sp *splitter) combine(better, other *splitCandidate) *splitCandidate {
	label := make([]int64, sp.g.n)
	for v := range label {
		label[v] = int64(better.piece[v])*int64(sp.k) + int64(other.piece[v])
	}
	h := coarsen(sp.g, sp.coarsest(), label, sp.rng)
	piece := slices.Clone(better.piece)
	for l, up := range h.up {
		coarse := make([]int32, h.levels[l+1].n)
		for v, c := range up {
			coarse[c] = piece[v]
		}
		piece = coarse
	}
	top := h.levels[len(h.levels)-1]
	return sp.refineDown(h, newSplitState(top, piece, sp.limits(top), &sp.effort))
}

// refineDown carries a split of the coarsest level down to the finest.
func (sp *splitter) refineDown(h *splitHierarchy, s *splitState) *splitCandidate {
	c := sp.polish(s)
	for l := len(h.up) - 1; l >= 0; l-- {
		piece := make([]int32, h.levels[l].n)
		for v, up := range h.up[l] {
			piece[v] = s.piece[up]
		}
		s = newSplitState(h.levels[l], piece, sp.limits(h.levels[l]), &sp.effort)
		c = sp.polish(s)
	}
	return c
}

// polish brings a state within its limits and improves it. It returns nil when
// it could not bring it within them.
func (sp *splitter) polish(s *splitState) *splitCandidate {
	s.rebalance()
	members := make([]int32, s.g.n)
	for v := range members {
		members[v] = int32(v)
	}
	newSplitRefiner(s).refine(members, 8)
	if s.excess > 0 {
		return nil
	}
	return &splitCandidate{piece: s.piece, cost: s.cost()}
}
