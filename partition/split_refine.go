package partition

// splitRefiner runs local search on the states of one level.
type splitRefiner struct {
	s      *splitState
	heap   splitHeap
	locked []bool
	moved  []splitMove
	dirty  []int32 // last move after which the vertex was looked at again
	serial int32
}

type splitMove struct{ v, from int32 }

func newSplitRefiner(s *splitState) *splitRefiner {
	n := s.g.n
	return &splitRefiner{
		s:      s,
		heap:   newSplitHeap(n),
		locked: make([]bool, n),
		dirty:  make([]int32, n),
	}
}

// refine repeats passes over members, the vertices that may start on a border,
// until one brings nothing.
func (r *splitRefiner) refine(members []int32, maxPasses int) {
	for range maxPasses {
		if !r.pass(members) {
			return
		}
	}
}

// pass is one round of Fiduccia and Mattheyses (A Linear-Time Heuristic for
// Improving Network Partitions, DAC 1982) among all open pieces: always make
// the best move left, even a worsening one, never move a vertex twice, and
// return in the end to the best state met. States are ordered by the poses
// above the limits, then by cost. It tells whether it found a better state.
func (r *splitRefiner) pass(members []int32) bool {
	s := r.s
	slack := s.g.maxWeight
	r.heap.reset()
	r.moved = r.moved[:0]
	for _, v := range members {
		r.look(v, slack)
	}
	startExcess, startCost := s.excess, s.cost()
	bestExcess, bestCost, bestLen := startExcess, startCost, 0
	patience := 25 + len(members)/20
	for len(r.moved)-bestLen < patience && *s.effort > 0 {
		v, key, ok := r.heap.pop()
		if !ok {
			break
		}
		to, gain := s.bestMove(v, slack)
		if to < 0 {
			continue
		}
		if gain < key {
			r.heap.set(v, gain)
			continue
		}
		if !s.detachable(v) {
			continue
		}
		from := s.piece[v]
		if s.excess > bestExcess && s.size[to]+s.g.weight[v] > s.limit[to] {
			continue // one overfull piece at a time
		}
		r.locked[v] = true
		r.moved = append(r.moved, splitMove{v, from})
		r.moveAndLook(v, to, slack)
		if s.excess < bestExcess || s.excess == bestExcess && s.cost() < bestCost {
			bestExcess, bestCost, bestLen = s.excess, s.cost(), len(r.moved)
		}
	}
	for i := len(r.moved) - 1; i >= bestLen; i-- {
		s.move(r.moved[i].v, r.moved[i].from)
	}
	for _, m := range r.moved {
		r.locked[m.v] = false
	}
	return bestExcess < startExcess || bestCost < startCost
}

// look puts v into the heap under the gain of its best move, or takes it out.
func (r *splitRefiner) look(v, slack int32) {
	if r.locked[v] || !r.s.open[r.s.piece[v]] {
		return
	}
	if to, gain := r.s.bestMove(v, slack); to >= 0 {
		r.heap.set(v, gain)
	} else {
		r.heap.remove(v)
	}
}

// moveAndLook makes a move and looks again at the vertices whose gains it
// changed: the neighbours, and the members of nets that had or have at most
// one member outside.
func (r *splitRefiner) moveAndLook(v, to, slack int32) {
	s, g := r.s, r.s.g
	from := s.piece[v]
	s.move(v, to)
	r.serial++
	r.dirty[v] = r.serial
	for _, u := range g.adj[g.start[v]:g.start[v+1]] {
		r.dirty[u] = r.serial
		r.look(u, slack)
	}
	for _, e := range g.inc[g.incStart[v]:g.incStart[v+1]] {
		now := s.outside[e]
		was := now
		switch s.piece[g.owner[e]] {
		case from:
			was--
		case to:
			was++
		}
		if was == now || min(was, now) > 1 {
			continue
		}
		for _, u := range g.pins[g.pinStart[e]:g.pinStart[e+1]] {
			if r.dirty[u] != r.serial {
				r.dirty[u] = r.serial
				r.look(u, slack)
			}
		}
	}
}

// splitHeap is a max-heap of vertices with changeable keys; among equal keys
// the one set last comes first (Hagen, Huang and Kahng, On Implementation
// Choices for Iterative Improvement Partitioning Algorithms, IEEE Trans. CAD
// 16(10), 1997).
type splitHeap struct {
	items []int32
	at    []int32 // position in items, -1 when absent
	key   []int64
	age   []int64
	clock int64
}

func newSplitHeap(n int) splitHeap {
	h := splitHeap{at: make([]int32, n), key: make([]int64, n), age: make([]int64, n)}
	for v := range h.at {
		h.at[v] = -1
	}
	return h
}

func (h *splitHeap) reset() {
	for _, v := range h.items {
		h.at[v] = -1
	}
	h.items = h.items[:0]
}

func (h *splitHeap) before(a, b int32) bool {
	return h.key[a] > h.key[b] || h.key[a] == h.key[b] && h.age[a] > h.age[b]
}

// set inserts v or changes its key.
func (h *splitHeap) set(v int32, key int64) {
	if h.at[v] >= 0 && h.key[v] == key {
		return
	}
	h.clock++
	h.key[v], h.age[v] = key, h.clock
	if h.at[v] < 0 {
		h.at[v] = int32(len(h.items))
		h.items = append(h.items, v)
	}
	h.fix(int(h.at[v]))
}

func (h *splitHeap) remove(v int32) {
	i := int(h.at[v])
	if i < 0 {
		return
	}
	last := len(h.items) - 1
	h.swap(i, last)
	h.items = h.items[:last]
	h.at[v] = -1
	if i < last {
		h.fix(i)
	}
}

func (h *splitHeap) pop() (v int32, key int64, ok bool) {
	if len(h.items) == 0 {
		return -1, 0, false
	}
	v = h.items[0]
	h.remove(v)
	return v, h.key[v], true
}

func (h *splitHeap) swap(i, j int) {
	h.items[i], h.items[j] = h.items[j], h.items[i]
	h.at[h.items[i]], h.at[h.items[j]] = int32(i), int32(j)
}

func (h *splitHeap) fix(i int) {
	for i > 0 && h.before(h.items[i], h.items[(i-1)/2]) {
		h.swap(i, (i-1)/2)
		i = (i - 1) / 2
	}
	for {
		top := i
		for c := 2*i + 1; c <= 2*i+2 && c < len(h.items); c++ {
			if h.before(h.items[c], h.items[top]) {
				top = c
			}
		}
		if top == i {
			return
		}
		h.swap(i, top)
		i = top
	}
}
