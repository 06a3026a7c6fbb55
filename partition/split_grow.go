package partition

import "math/rand/v2"

// growPieces makes a first assignment of a coarse graph by recursive
// bisection: a piece that stands for several is cut in two, over and over.
// Each cut is the best of several tries, each grown from another vertex. It
// returns nil when a piece would stay empty.
func growPieces(g *splitGraph, k int, limit int32, effort *int64, rng *rand.Rand) *splitState {
	limits := make([]int32, k)
	limits[0] = limit * int32(k)
	s := newSplitState(g, make([]int32, g.n), limits, effort)
	r := newSplitRefiner(s)
	share := make([]int32, k) // final pieces that piece p still stands for
	share[0] = int32(k)
	for next := int32(1); next < int32(k); next++ {
		// The piece that stands for most is cut next.
		p := int32(0)
		for q := range next {
			if share[q] > share[p] {
				p = q
			}
		}
		share[next] = share[p] / 2
		share[p] -= share[next]
		r.bisect(p, next, share[p], share[next], limit, rng)
		if s.size[next] == 0 {
			return nil
		}
	}
	for p := range limits {
		limits[p] = limit
		s.open[p] = true
	}
	s.setLimits(limits)
	return s
}

// splitTries is the number of starts of each bisection.
const splitTries = 6

// bisect cuts piece p into p and the empty piece q, which stand for shareP and
// shareQ final pieces of at most limit poses.
func (r *splitRefiner) bisect(p, q, shareP, shareQ, limit int32, rng *rand.Rand) {
	s := r.s
	var members []int32
	for v, at := range s.piece {
		s.open[at] = false
		if at == p {
			members = append(members, int32(v))
		}
	}
	s.open[p], s.open[q] = true, true
	total := s.size[p]
	// Half of the slack of the final pieces is kept for the cuts below.
	s.limit[p] = cutLimit(total, shareP, shareP+shareQ, limit)
	s.limit[q] = cutLimit(total, shareQ, shareP+shareQ, limit)
	s.setLimits(s.limit)
	target := max(1, int32(int64(total)*int64(shareQ)/int64(shareP+shareQ)))
	best := make([]int32, len(members))
	bestExcess, bestCost := int64(-1), int64(0)
	for try := range splitTries {
		seed := members[rng.IntN(len(members))]
		if try%2 == 0 {
			flood := s.flood(seed, s.nextStamp(1))
			seed = flood[len(flood)-1] // far from where it began
		}
		r.grow(seed, members, q, target)
		s.rebalance()
		r.refine(members, 4)
		if bestExcess < 0 || s.excess < bestExcess || s.excess == bestExcess && s.cost() < bestCost {
			bestExcess, bestCost = s.excess, s.cost()
			for i, v := range members {
				best[i] = s.piece[v]
			}
		}
		for _, v := range members {
			if s.piece[v] == q {
				s.move(v, p)
			}
		}
	}
	for i, v := range members {
		if best[i] == q {
			s.move(v, q)
		}
	}
}

// cutLimit is the largest size of one side of a cut.
func cutLimit(total, share, of, limit int32) int32 {
	even := int32((int64(total)*int64(share) + int64(of) - 1) / int64(of))
	most := limit * share
	if share == 1 {
		return max(most, even)
	}
	return max((even+most)/2, even)
}

// grow moves vertices of a piece, given as members, to piece q, beginning with
// seed and always the one that costs least next, until q has target poses;
// what it cut off from the largest remainder follows, so that both are
// connected.
func (r *splitRefiner) grow(seed int32, members []int32, q, target int32) {
	s, g, p := r.s, r.s.g, r.s.piece[seed]
	r.heap.reset()
	r.heap.set(seed, 0)
	for s.size[q] < target && *s.effort > 0 {
		v, _, ok := r.heap.pop()
		if !ok || s.size[p] == g.weight[v] {
			break
		}
		s.move(v, q)
		for _, u := range g.adj[g.start[v]:g.start[v+1]] {
			if s.piece[u] == p {
				r.heap.set(u, s.gainTo(u, q))
			}
		}
	}
	stamp := s.nextStamp(1)
	most, largest := int32(-1), int32(0)
	parts := 0
	for _, v := range members {
		if s.piece[v] == p && s.seen[v] != stamp {
			parts++
			size := int32(0)
			for _, u := range s.flood(v, stamp) {
				size += g.weight[u]
			}
			if size > largest {
				most, largest = v, size
			}
		}
	}
	if parts <= 1 {
		return
	}
	stamp = s.nextStamp(1)
	s.flood(most, stamp)
	for _, v := range members {
		if s.piece[v] == p && s.seen[v] != stamp {
			s.move(v, q)
		}
	}
}

// flood marks with stamp what hangs together with v within its piece, and
// lists it breadth first. The list is scratch.
func (s *splitState) flood(v, stamp int32) []int32 {
	g, p := s.g, s.piece[v]
	q := append(s.queue[:0], v)
	s.seen[v] = stamp
	for i := 0; i < len(q); i++ {
		for _, u := range g.adj[g.start[q[i]]:g.start[q[i]+1]] {
			if s.piece[u] == p && s.seen[u] != stamp {
				s.seen[u] = stamp
				q = append(q, u)
			}
		}
	}
	s.queue = q
	return q
}
