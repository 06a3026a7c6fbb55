package evidence

import (
	"math"

	"selvage/internal/lie"
)

// Ties of several pairs may rest on one and the same place: where one place looks like another, every robot that comes by makes
// the same error, and the errors agree with each other. Between two parts of the fleet such a place counts once, however many
// pairs it ties together, so what binds the parts is not the sum of the pairs' weights. What is held must therefore hang together
// even if any two places are struck out.

const strikes = 2

// firm numbers the units so that those with the same number still hang together in c, over any hypotheses it satisfies, when any
// two places are struck out. A place struck out takes from each hypothesis the nearest of its own places, if that
// lies within twice o.PlaceM: so much for the extent of a place and for what c misplaces it.
func (f *fleet) firm(c *config) []int {
	s := striker{f: f, class: make([]int, f.n), strong: make([]int, f.n)}
	for u := range s.strong {
		s.strong[u] = u
	}
	copy(s.class, c.comp)
	for k := range f.hs {
		h := &f.hs[k]
		if !c.holds[k] || h.weight == 0 {
			continue
		}
		if len(h.spots) > strikes { // not to be struck out
			merge(s.strong, h.a, h.b)
			continue
		}
		s.weak = append(s.weak, k)
	}
	live := s.weak[:0]
	for _, k := range s.weak {
		if root(s.strong, f.hs[k].a) != root(s.strong, f.hs[k].b) {
			live = append(live, k)
		}
	}
	s.weak = live
	var centres []int // ties
	for _, k := range s.weak {
		centres = append(centres, f.hs[k].spots...)
	}
	s.hits = make([][]hit, len(centres))
	for j, x := range centres {
		for w, k := range s.weak {
			best, d := -1, 2*f.b.o.PlaceM
			for i, t := range f.hs[k].spots {
				if g := f.gap(c, x, t); g <= d {
					best, d = i, g
				}
			}
			if best >= 0 {
				s.hits[j] = append(s.hits[j], hit{w, best})
			}
		}
	}
	s.struck = make([][]int, len(s.weak))
	for w, k := range s.weak {
		s.struck[w] = make([]int, len(f.hs[k].spots))
	}
	s.strike(0, strikes)
	return s.class
}

// gap is the distance between the places of two ties, as seen from either end or by a unit that both have in common: c may
// misplace units against each other, but a unit knows its own track. Infinite between components.
func (f *fleet) gap(c *config, x, y int) float64 {
	l, m := &f.b.links[x], &f.b.links[y]
	if c.comp[l.a] != c.comp[m.a] {
		return math.Inf(1)
	}
	p := [2]lie.SE3{f.b.tracks[l.a].Poses[l.i], f.b.tracks[l.b].Poses[l.j]}
	q := [2]lie.SE3{f.b.tracks[m.a].Poses[m.i], f.b.tracks[m.b].Poses[m.j]}
	u, v := [2]int{l.a, l.b}, [2]int{m.a, m.b}
	least := math.Inf(1)
	for i := range p {
		for j := range q {
			d := 0.0
			if u[i] == v[j] {
				d = distance(p[i].T, q[j].T)
			} else {
				d = distance(c.at[u[i]].Apply(p[i].T), c.at[v[j]].Apply(q[j].T))
			}
			least = min(least, d)
		}
	}
	return least
}

// hit is a place of a weak hypothesis: indices into weak and into its spots.
type hit struct{ weak, spot int }

type striker struct {
	f      *fleet
	weak   []int   // hypotheses that few places can bring down
	hits   [][]hit // per centre
	struck [][]int // per weak hypothesis and spot: how often it is struck out
	strong []int   // units joined by what cannot be brought down
	class  []int
}

// strike strikes out every choice of left places from centre on, and splits the classes by what still hangs together.
func (s *striker) strike(centre, left int) {
	if left == 0 || centre == len(s.hits) {
		s.split()
		return
	}
	for j := centre; j < len(s.hits); j++ {
		for _, h := range s.hits[j] {
			s.struck[h.weak][h.spot]++
		}
		s.strike(j+1, left-1)
		for _, h := range s.hits[j] {
			s.struck[h.weak][h.spot]--
		}
	}
}

func (s *striker) split() {
	n := s.f.n
	join := make([]int, n)
	copy(join, s.strong)
	for w, k := range s.weak {
		for _, x := range s.struck[w] {
			if x == 0 {
				merge(join, s.f.hs[k].a, s.f.hs[k].b)
				break
			}
		}
	}
	// Same class and still joined: same class after; named by its lowest unit.
	next := make([]int, n)
	for u := range next {
		next[u] = u
		for v := 0; v < u; v++ {
			if s.class[v] == s.class[u] && root(join, v) == root(join, u) {
				next[u] = next[v]
				break
			}
		}
	}
	s.class = next
}

func root(parent []int, u int) int {
	for parent[u] != u {
		u = parent[u]
	}
	return u
}

func merge(parent []int, u, v int) {
	u, v = root(parent, u), root(parent, v)
	parent[max(u, v)] = min(u, v)
}
