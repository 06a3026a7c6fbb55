package partition

import "math"

// splitState is an assignment of the vertices of one level to pieces, with
// everything a move needs kept up to date. Each piece is connected and stays
// so: only vertices for which detachable holds are moved by the callers.
type splitState struct {
	g     *splitGraph
	piece []int32
	size  []int32 // poses in each piece
	limit []int32 // the most poses a piece should have
	open  []bool  // pieces that take part in moves

	outside  []int32 // members of each net that are not in the piece of its owner
	boundary int64   // poses with a neighbour in another piece
	cut      int64   // measurements between pieces
	excess   int64   // poses above limit, over all pieces
	scale    int64   // value of one boundary pose in units of one cut measurement
	effort   *int64  // entries of g that may still be looked at; search ends at zero

	// Scratch of bestMove, indexed by piece, and of detachable, by vertex.
	conn    []int64
	gain    []int64
	touched []int32
	seen    []int32
	stamp   int32
	queue   []int32
	unite   []int32 // what each search of detachable was united with
	pending []int32 // vertices each search has yet to leave from
}

// newSplitState takes over piece and limit.
func newSplitState(g *splitGraph, piece, limit []int32, effort *int64) *splitState {
	k := len(limit)
	s := &splitState{
		g: g, piece: piece, limit: limit, effort: effort,
		size:    make([]int32, k),
		open:    make([]bool, k),
		outside: make([]int32, len(g.owner)),
		scale:   1,
		conn:    make([]int64, k),
		gain:    make([]int64, k),
		seen:    make([]int32, g.n),
	}
	for v, p := range piece {
		s.size[p] += g.weight[v]
		for i := g.start[v]; i < g.start[v+1]; i++ {
			s.scale += int64(g.mult[i])
			if piece[g.adj[i]] != p {
				s.cut += int64(g.mult[i])
			}
		}
	}
	s.cut /= 2
	for e, o := range g.owner {
		for _, u := range g.pins[g.pinStart[e]:g.pinStart[e+1]] {
			if piece[u] != piece[o] {
				s.outside[e]++
			}
		}
		if s.outside[e] > 0 {
			s.boundary += int64(g.netWeight[e])
		}
	}
	for p := range k {
		s.open[p] = true
	}
	s.setLimits(limit)
	return s
}

// setLimits takes over limit.
func (s *splitState) setLimits(limit []int32) {
	s.limit = limit
	s.excess = 0
	for p := range limit {
		s.excess += int64(max(0, s.size[p]-limit[p]))
	}
}

// cost is what refinement lowers: boundary poses first, then cut measurements.
func (s *splitState) cost() int64 { return s.boundary*s.scale + s.cut }

// move puts v into piece to.
func (s *splitState) move(v, to int32) {
	g, from := s.g, s.piece[v]
	for i := g.start[v]; i < g.start[v+1]; i++ {
		switch s.piece[g.adj[i]] {
		case from:
			s.cut += int64(g.mult[i])
		case to:
			s.cut -= int64(g.mult[i])
		}
	}
	for e := g.netStart[v]; e < g.netStart[v+1]; e++ {
		was, now := s.outside[e], int32(0)
		for _, u := range g.pins[g.pinStart[e]:g.pinStart[e+1]] {
			if s.piece[u] != to {
				now++
			}
		}
		s.outside[e] = now
		if was == 0 && now > 0 {
			s.boundary += int64(g.netWeight[e])
		} else if was > 0 && now == 0 {
			s.boundary -= int64(g.netWeight[e])
		}
	}
	for _, e := range g.inc[g.incStart[v]:g.incStart[v+1]] {
		switch s.piece[g.owner[e]] {
		case from:
			if s.outside[e] == 0 {
				s.boundary += int64(g.netWeight[e])
			}
			s.outside[e]++
		case to:
			s.outside[e]--
			if s.outside[e] == 0 {
				s.boundary -= int64(g.netWeight[e])
			}
		}
	}
	s.piece[v] = to
	w := g.weight[v]
	s.excess -= int64(max(0, s.size[from]-s.limit[from]) + max(0, s.size[to]-s.limit[to]))
	s.size[from] -= w
	s.size[to] += w
	s.excess += int64(max(0, s.size[from]-s.limit[from]) + max(0, s.size[to]-s.limit[to]))
}

// bestMove returns the piece beside v to which moving it lowers the cost most,
// and by how much; to is -1 when no open piece beside v has room. A target may
// pass its limit by slack poses.
func (s *splitState) bestMove(v, slack int32) (to int32, gain int64) {
	g, from := s.g, s.piece[v]
	w := g.weight[v]
	to = -1
	if s.size[from] == w {
		return to, 0
	}
	s.gatherGains(v)
	for _, p := range s.touched {
		if p != from && s.open[p] && s.size[p]+w <= s.limit[p]+slack {
			x := s.gain[p]*s.scale + s.conn[p] - s.conn[from]
			if to < 0 || x > gain || x == gain && s.size[p] < s.size[to] {
				to, gain = p, x
			}
		}
	}
	s.clearGains(from)
	return to, gain
}

// gainTo returns by how much moving v to the neighbouring piece to lowers the cost.
func (s *splitState) gainTo(v, to int32) int64 {
	from := s.piece[v]
	s.gatherGains(v)
	x := s.gain[to]*s.scale + s.conn[to] - s.conn[from]
	s.clearGains(from)
	return x
}

// gatherGains fills, for every piece beside v, the measurements between v and
// the piece (conn) and the boundary poses a move there removes (gain), and
// lists those pieces in touched. The caller clears with clearGains.
func (s *splitState) gatherGains(v int32) {
	g, from := s.g, s.piece[v]
	*s.effort -= int64(g.start[v+1] - g.start[v] + g.incStart[v+1] - g.incStart[v])
	for i := g.start[v]; i < g.start[v+1]; i++ {
		p := s.piece[g.adj[i]]
		if s.conn[p] == 0 && p != from {
			s.touched = append(s.touched, p)
		}
		s.conn[p] += int64(g.mult[i])
	}
	if len(s.touched) == 0 {
		return
	}
	loss := int64(0) // nets inside this piece, cut by any move
	for e := g.netStart[v]; e < g.netStart[v+1]; e++ {
		if s.outside[e] == 0 {
			loss += int64(g.netWeight[e])
			continue
		}
		pins := g.pins[g.pinStart[e]:g.pinStart[e+1]]
		if int(s.outside[e]) < len(pins) {
			continue
		}
		p := s.piece[pins[0]]
		whole := true
		for _, u := range pins[1:] {
			if s.piece[u] != p {
				whole = false
				break
			}
		}
		if whole {
			s.gain[p] += int64(g.netWeight[e])
		}
	}
	for _, e := range g.inc[g.incStart[v]:g.incStart[v+1]] {
		if out := s.outside[e]; out <= 1 {
			p := s.piece[g.owner[e]]
			if out == 0 {
				loss += int64(g.netWeight[e]) // then v, a member, lies in p == from
			} else if p != from {
				s.gain[p] += int64(g.netWeight[e])
			}
		}
	}
	for _, p := range s.touched {
		s.gain[p] -= loss
	}
}

func (s *splitState) clearGains(from int32) {
	for _, p := range s.touched {
		s.conn[p], s.gain[p] = 0, 0
	}
	s.conn[from] = 0
	s.touched = s.touched[:0]
}

// splitReach bounds the vertices visited to prove that a piece holds together
// without one vertex; when they do not suffice the vertex stays.
const splitReach = 8192

// detachable reports whether the piece of v stays connected and non-empty
// without v. Searches spread from all neighbours of v in the piece in turn and
// unite where they meet; it is proved when one is left, and refuted when one
// has nowhere to go.
func (s *splitState) detachable(v int32) bool {
	g, p := s.g, s.piece[v]
	neighbours := g.adj[g.start[v]:g.start[v+1]]
	*s.effort -= int64(len(neighbours))
	base := s.nextStamp(int32(len(neighbours)) + 1)
	q := s.queue[:0]
	s.unite, s.pending = s.unite[:0], s.pending[:0]
	for _, u := range neighbours {
		if s.piece[u] == p {
			x := int32(len(q))
			s.seen[u] = base + x
			s.unite = append(s.unite, x)
			s.pending = append(s.pending, 1)
			q = append(q, u)
		}
	}
	left := len(q)
	for i := 0; left > 1 && i < len(q) && len(q) < splitReach; i++ {
		x := s.united(s.seen[q[i]] - base)
		*s.effort -= int64(g.start[q[i]+1] - g.start[q[i]])
		for _, u := range g.adj[g.start[q[i]]:g.start[q[i]+1]] {
			if s.piece[u] != p || u == v {
				continue
			}
			if s.seen[u] < base {
				s.seen[u] = base + x
				s.pending[x]++
				q = append(q, u)
			} else if y := s.united(s.seen[u] - base); y != x {
				s.unite[y] = x
				s.pending[x] += s.pending[y]
				left--
			}
		}
		s.pending[x]--
		if s.pending[x] == 0 && left > 1 {
			break
		}
	}
	s.queue = q
	return left == 1
}

// united returns the search that x was united with.
func (s *splitState) united(x int32) int32 {
	for s.unite[x] != x {
		s.unite[x] = s.unite[s.unite[x]]
		x = s.unite[x]
	}
	return x
}

// nextStamp returns the first of count numbers above all in seen.
func (s *splitState) nextStamp(count int32) int32 {
	if s.stamp > math.MaxInt32-count {
		clear(s.seen)
		s.stamp = 0
	}
	first := s.stamp + 1
	s.stamp += count
	return first
}
