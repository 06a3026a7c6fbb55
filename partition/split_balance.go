package partition

import "slices"

// rebalance brings every piece down to its limit as far as it can. An overfull
// piece and the nearest piece with room are joined by a path of neighbouring
// pieces, and one vertex is handed on along each step of it, the last step
// first, so that every move goes to a piece with room and keeps both pieces
// connected. A step with no vertex to hand on is blocked until the excess falls.
func (s *splitState) rebalance() {
	if s.excess == 0 {
		return
	}
	var blocked [][2]int32
	prev := make([]int32, len(s.limit))
	for s.excess > 0 && *s.effort > 0 {
		first, members := splitBuckets(s.piece, len(s.limit))
		*s.effort -= int64(s.g.n)
		path := s.pathToRoom(first, members, blocked, prev)
		if path == nil {
			return
		}
		before := s.excess
		for i := 1; i < len(path); i++ {
			from, to := path[i], path[i-1]
			v := s.bestHandOn(members[first[from]:first[from+1]], to)
			if v < 0 {
				blocked = append(blocked, [2]int32{from, to})
				break
			}
			s.move(v, to)
		}
		if s.excess < before {
			blocked = blocked[:0]
		}
	}
}

// pathToRoom returns the pieces on a shortest way from an overfull piece to
// one with room, that one first, all open and no step blocked; or nil. The
// vertices of piece p are members[first[p]:first[p+1]]; prev is scratch.
func (s *splitState) pathToRoom(first, members []int32, blocked [][2]int32, prev []int32) (path []int32) {
	queue := s.queue[:0]
	for p := range prev {
		prev[p] = -1
		if s.open[p] && s.size[p] > s.limit[p] {
			prev[p] = int32(p)
			queue = append(queue, int32(p))
		}
	}
	for i := 0; i < len(queue); i++ {
		p := queue[i]
		for _, v := range members[first[p]:first[p+1]] {
			for _, u := range s.g.adj[s.g.start[v]:s.g.start[v+1]] {
				t := s.piece[u]
				if prev[t] >= 0 || !s.open[t] || slices.Contains(blocked, [2]int32{p, t}) {
					continue
				}
				prev[t] = p
				if s.size[t] >= s.limit[t] {
					queue = append(queue, t)
					continue
				}
				path = append(path, t)
				for prev[t] != t {
					t = prev[t]
					path = append(path, t)
				}
				s.queue = queue
				return path
			}
		}
	}
	s.queue = queue
	return nil
}

// bestHandOn returns the one among the vertices of a piece whose move to piece
// to costs least, or -1. Only vertices that fit below the limit count.
func (s *splitState) bestHandOn(vertices []int32, to int32) int32 {
	room := s.limit[to] - s.size[to]
	best, bestGain := int32(-1), int64(0)
	g := s.g
	for _, v := range vertices {
		if g.weight[v] > room {
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
