package sparse

import (
	"cmp"
	"math/rand/v2"
	"slices"
)

const (
	growings   = 8   // starts on the coarsest level
	candidates = 3   // of which so many are refined on all levels
	setback    = 60  // moves without improvement that end a pass
	separator  = 2   // the third "side"
	unbalance  = 0.6 // largest share of a side
)

// bisect cuts a graph in two by a vertex separator: it returns 0, 1 or separator
// for each vertex, or nil for a graph that cannot be coarsened (stars and the like).
func bisect(l *level, rng *rand.Rand) []int8 {
	best := cutting{}
	runs := 1
	if l.order() > 4*leafSize {
		runs = 2
	}
	for range runs {
		levels := coarsen(l, rng)
		k := len(levels) - 1
		if levels[k].order() > 8*coarsest {
			return nil
		}
		tries := make([]cutting, growings)
		for i := range tries {
			tries[i] = levels[k].grow(rng)
			tries[i].refine()
		}
		slices.SortStableFunc(tries, func(a, b cutting) int { return cmp.Compare(a.cost(), b.cost()) })
		tries = tries[:candidates]
		for k--; k >= 0; k-- {
			for i := range tries {
				tries[i] = tries[i].project(levels[k])
				tries[i].refine()
			}
		}
		for _, c := range tries {
			if best.l == nil || c.cost() < best.cost() {
				best = c
			}
		}
	}
	return best.side
}

// cutting is a graph cut in two by a vertex separator.
type cutting struct {
	l     *level
	side  []int8
	sizes [3]int32 // weights of the sides and the separator
}

// cost is the weight of the separator, and more if a side is too heavy.
func (c *cutting) cost() int32 {
	return c.sizes[separator] + 2*max(0, max(c.sizes[0], c.sizes[1])-c.limit())
}

func (c *cutting) limit() int32 { return int32(unbalance * float64(c.l.total)) }

// grow lets side 0 grow from a random vertex to half the weight, always taking the
// vertex that is tied to it most strongly.
func (l *level) grow(rng *rand.Rand) cutting {
	n := l.order()
	c := cutting{l: l, side: make([]int8, n)}
	for i := range c.side {
		c.side[i] = 1
	}
	tied, sum := make([]int32, n), make([]int32, n)
	for i := range int32(n) {
		_, weight := l.edges(i)
		for _, w := range weight {
			sum[i] += w
		}
	}
	grown := int32(0)
	for v := int32(rng.IntN(n)); ; {
		c.side[v] = 0
		grown += l.weight[v]
		to, weight := l.edges(v)
		for k, u := range to {
			tied[u] += weight[k]
		}
		if 2*grown >= l.total {
			break
		}
		v = -1
		for u := range int32(n) {
			if c.side[u] == 1 && (v < 0 || better(tied[u], sum[u], tied[v], sum[v])) {
				v = u
			}
		}
	}
	// The separator: what side 1 has next to side 0.
	for i := range int32(n) {
		if c.side[i] == 1 && tied[i] > 0 {
			c.side[i] = separator
		}
	}
	c.weigh()
	return c
}

// better compares vertices tied to the growing side by a of sum: any tie beats
// none, then fewer edges left over.
func better(a, sum, b, sumB int32) bool {
	if (a > 0) != (b > 0) {
		return a > 0
	}
	return 2*a-sum > 2*b-sumB
}

func (c *cutting) weigh() {
	c.sizes = [3]int32{}
	for i, s := range c.side {
		c.sizes[s] += c.l.weight[i]
	}
}

// project carries a cutting to the next finer level.
func (c *cutting) project(fine *level) cutting {
	f := cutting{l: fine, side: make([]int8, fine.order()), sizes: c.sizes}
	for i, u := range fine.up {
		f.side[i] = c.side[u]
	}
	return f
}

// refine moves vertices out of the separator, each time pulling in what would
// otherwise touch across, also through worse states, and keeps the best state
// (after Fiduccia and Mattheyses, 'A Linear-Time Heuristic for Improving Network
// Partitions', DAC 1982). A pass moves to one side only; the sides take turns until
// neither gains.
func (c *cutting) refine() {
	r := refinement{cutting: c, pull: make([]int32, c.l.order())}
	to := int8(0)
	if c.sizes[1] < c.sizes[0] {
		to = 1
	}
	for idle := 0; idle < 2; to = 1 - to {
		idle++
		if r.pass(to) {
			idle = 0
		}
	}
}

type refinement struct {
	*cutting
	members []int32 // the separator
	pull    []int32 // of a member: weight of its neighbours on the side that gives
	log     []change
}

type change struct {
	v    int32
	from int8
}

func (r *refinement) move(v int32, side int8) {
	r.log = append(r.log, change{v, r.side[v]})
	r.sizes[r.side[v]] -= r.l.weight[v]
	r.sizes[side] += r.l.weight[v]
	r.side[v] = side
}

// enter takes v into the separator of a pass in which side from gives.
func (r *refinement) enter(v int32, from int8) {
	r.members = append(r.members, v)
	r.pull[v] = 0
	for _, u := range r.l.neighbours(v) {
		if r.side[u] == from {
			r.pull[v] += r.l.weight[u]
		}
	}
}

// pass moves members to side to and reports whether the cutting is better now.
func (r *refinement) pass(to int8) bool {
	from := 1 - to
	r.members, r.log = r.members[:0], r.log[:0]
	for i, s := range r.side {
		if s == separator {
			r.enter(int32(i), from)
		}
	}
	start, limit := r.cost(), r.limit()
	best, keep := start, 0
	for since := 0; since < setback; since++ {
		chosen, gain := -1, int32(0)
		for k, v := range r.members {
			if r.sizes[to]+r.l.weight[v] > limit && r.sizes[to] >= r.sizes[from] {
				continue
			}
			if g := r.l.weight[v] - r.pull[v]; chosen < 0 || g > gain {
				chosen, gain = k, g
			}
		}
		if chosen < 0 {
			break
		}
		v, last := r.members[chosen], len(r.members)-1
		r.members[chosen] = r.members[last]
		r.members = r.members[:last]
		r.move(v, to)
		for _, u := range r.l.neighbours(v) {
			if r.side[u] != from {
				continue
			}
			r.move(u, separator)
			for _, x := range r.l.neighbours(u) {
				if r.side[x] == separator {
					r.pull[x] -= r.l.weight[u]
				}
			}
			r.enter(u, from)
		}
		if cost := r.cost(); cost < best {
			best, keep, since = cost, len(r.log), -1
		}
	}
	for k := len(r.log) - 1; k >= keep; k-- {
		c := r.log[k]
		r.move(c.v, c.from)
	}
	return best < start
}
