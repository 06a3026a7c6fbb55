package partition

// rebalance brings every piece down to its limit as far as it can. An overfull
// piece and the nearest piece with room are joined by a path of neighbouring
// pieces, and one vertex is handed on along each step of it, the last step
// first, so that every move goes to a piece with room and keeps both pieces
// connected. Steps with no vertex to hand on are blocked until the excess falls.
func (s *splitState) rebalance() {
	if s.excess == 0 {
		return
	}
	k := len(s.limit)
	q := newSplitQuotient(k)
	for s.excess > 0 {
		q.fill(s)
		path := q.path(s)
		if path == nil {
			return
		}
		before := s.excess
		for i := len(path) - 2; i >= 0; i-- {
			from, to := path[i], path[i+1]
			v := s.bestHandOn(from, to)
			if v < 0 {
				q.blocked[int(from)*k+int(to)] = true
				break
			}
			s.move(v, to)
		}
		if s.excess < before {
			clear(q.blocked)
		}
	}
}

// bestHandOn returns the vertex of piece from whose move to piece to costs
// least, or -1. Only vertices that fit below the limit count.
func (s *splitState) bestHandOn(from, to int32) int32 {
	room := s.limit[to] - s.size[to]
	best, bestGain := int32(-1), int64(0)
	g := s.g
	for v := range int32(g.n) {
		if s.piece[v] != from || g.weight[v] > room {
			continue
		}
		for _, u := range g.adj[g.start[v]:g.start[v+1]] {
			if s.piece[u] == to {
				if x := s.gainTo(v, to); (best < 0 || x > bestGain) && s.detachable(v) {
					best, bestGain = v, x
				}
				break
			}
		}
	}
	return best
}

// splitQuotient is the graph of pieces: joined when an edge runs between them.
type splitQuotient struct {
	k       int
	joined  []bool
	blocked []bool // steps that found no vertex to hand on
	prev    []int32
	queue   []int32
}

func newSplitQuotient(k int) *splitQuotient {
	return &splitQuotient{k: k, joined: make([]bool, k*k), blocked: make([]bool, k*k), prev: make([]int32, k)}
}

func (q *splitQuotient) fill(s *splitState) {
	clear(q.joined)
	for v, p := range s.piece {
		for _, u := range s.g.adj[s.g.start[v]:s.g.start[v+1]] {
			q.joined[int(p)*q.k+int(s.piece[u])] = true
		}
	}
}

// path returns the pieces of a shortest path of unblocked steps from an
// overfull piece to one with room, all open, or nil.
func (q *splitQuotient) path(s *splitState) []int32 {
	q.queue = q.queue[:0]
	for p := range int32(q.k) {
		q.prev[p] = -1
		if s.open[p] && s.size[p] > s.limit[p] {
			q.prev[p] = p
			q.queue = append(q.queue, p)
		}
	}
	for i := 0; i < len(q.queue); i++ {
		p := q.queue[i]
		for t := range int32(q.k) {
			step := int(p)*q.k + int(t)
			if !q.joined[step] || q.blocked[step] || !s.open[t] || q.prev[t] >= 0 {
				continue
			}
			q.prev[t] = p
			if s.size[t] < s.limit[t] {
				path := []int32{t}
				for q.prev[t] != t {
					t = q.prev[t]
					path = append(path, t)
				}
				for i, j := 0, len(path)-1; i < j; i, j = i+1, j-1 {
					path[i], path[j] = path[j], path[i]
				}
				return path
			}
			q.queue = append(q.queue, t)
		}
	}
	return nil
}
