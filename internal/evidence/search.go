package evidence

import (
	"cmp"
	"slices"

	"selvage/internal/lie"
)

// The search goes from configuration to configuration by moving a part of the fleet rigidly against the rest, as an unsatisfied
// hypothesis asks. Which part is best to move is a minimum cut (after the expansion moves of Boykov, Veksler, Zabih, "Fast
// approximate energy minimization via graph cuts", PAMI 23(11), 2001).

// best returns the configuration that local search finds from nothing.
func (f *fleet) best() config {
	n := len(f.hs)
	c := config{at: make([]lie.SE3, f.n), comp: make([]int, f.n), holds: make([]bool, n), pa: make([][3]float64, n), qb: make([][3]float64, n)}
	for u := range c.at {
		c.at[u], c.comp[u] = lie.Identity(), u
	}
	f.grow(&c)
	f.settle(&c)
	return c
}

// slack is how much weight a first move may lose for the sake of those that follow it.
const slack = 4

// settle improves c by single moves, then by moves that first lose a little, until neither helps.
func (f *fleet) settle(c *config) {
	f.improve(c, -1, nil)
	for f.escape(c) {
		f.improve(c, -1, nil)
	}
}

// escape looks for a better configuration by way of one that is a little worse than c.
func (f *fleet) escape(c *config) bool {
	rs := f.opposition(c, nil)
	f.load(c)
	class := f.bound(slack + gainOf(rs))
	for _, r := range rs {
		if class[f.hs[r.k].a] == class[f.hs[r.k].b] {
			continue
		}
		m := f.move(r.cluster, r.gain, slack, nil)
		if m.loss > slack {
			continue
		}
		next := f.apply(c, r.k, m.moved)
		f.deepen(c, &next, -1)
		if next.score > c.score {
			*c = next
			return true
		}
		f.load(c)
	}
	return false
}

// improve moves parts of the fleet as long as the score rises. A hypothesis given as broken stays unsatisfied. If near is given,
// only hypotheses of units it marks are tried.
func (f *fleet) improve(c *config, broken int, near []bool) {
	for f.improveOnce(c, broken, near) {
	}
}

func (f *fleet) improveOnce(c *config, broken int, near []bool) bool {
	f.load(c)
	for k := range f.hs {
		h := &f.hs[k]
		if c.holds[k] || k == broken || near != nil && !near[h.a] && !near[h.b] {
			continue
		}
		if c.comp[h.a] != c.comp[h.b] {
			next := c.clone()
			f.shift(&next, c.comp[h.b], c.comp[h.a], f.displacement(c, k))
			f.judge(&next)
			if next.score > c.score && (broken < 0 || !next.holds[broken]) {
				*c = next
				return true
			}
			continue
		}
		cluster, gain := f.cluster(c, k)
		if gain <= f.capacity[h.a*f.n+h.b] {
			continue
		}
		m := f.move(cluster, gain, gain, nil)
		if m.loss >= 0 {
			continue
		}
		next := f.apply(c, k, m.moved)
		if next.score > c.score && (broken < 0 || !next.holds[broken]) {
			*c = next
			return true
		}
	}
	return false
}

// load fills the capacities with the weight that binds each pair of units in c.
func (f *fleet) load(c *config) {
	clear(f.capacity)
	for k := range f.hs {
		if c.holds[k] {
			h := &f.hs[k]
			f.capacity[h.a*f.n+h.b] += h.weight
			f.capacity[h.b*f.n+h.a] += h.weight
		}
	}
}

// crossing is a hypothesis that a move satisfies if its unit stays stays and its unit goes moves.
type crossing struct{ stays, goes, weight int }

// cluster returns the unsatisfied hypotheses that agree with k on how a part of the fleet is to be moved against the rest; k
// itself is the first. gain is their weight.
func (f *fleet) cluster(c *config, k int) (cs []crossing, gain int) {
	h := &f.hs[k]
	d := f.displacement(c, k)
	cs = append(cs, crossing{h.a, h.b, h.weight})
	gain = h.weight
	for m := range f.hs {
		g := &f.hs[m]
		if m == k || c.holds[m] || c.comp[g.a] != c.comp[h.a] || c.comp[g.b] != c.comp[h.a] {
			continue
		}
		if f.forth(c, m, &d) {
			cs = append(cs, crossing{g.a, g.b, g.weight})
			gain += g.weight
			continue
		}
		if f.back(c, m, &d) {
			cs = append(cs, crossing{g.b, g.a, g.weight})
			gain += g.weight
		}
	}
	return cs, gain
}

// move is a part of the fleet to be moved, and what that costs in weight.
type move struct {
	loss  int
	moved []bool
}

// move finds the part of the fleet whose moving costs least: the minimum cut between the units of the cluster's first, less what
// the cluster gains. Others of the cluster are forced across one at a time while that pays. If apart names two units, these are
// parted as well. The loss is exact up to limit and above it otherwise. f must be loaded.
func (f *fleet) move(cluster []crossing, gain, limit int, apart []int) move {
	best := move{loss: limit + 1}
	for turn := 0; turn < 2; turn++ {
		stay, goes := newSet(f.n).with(cluster[0].stays), newSet(f.n).with(cluster[0].goes)
		if len(apart) == 2 {
			stay.add(apart[turn])
			goes.add(apart[1-turn])
		} else if turn == 1 {
			break
		}
		if stay.meets(goes) {
			continue
		}
		at, ok := f.part(stay, goes, cluster, limit+gain)
		if !ok {
			continue
		}
		for rising := true; rising; {
			rising = false
			for _, x := range cluster[1:] {
				if goes.has(x.stays) || stay.has(x.goes) || stay.has(x.stays) && goes.has(x.goes) {
					continue
				}
				s, g := stay.with(x.stays), goes.with(x.goes)
				if t, ok := f.part(s, g, cluster, at.loss+gain); ok && t.loss < at.loss {
					at, stay, goes, rising = t, s, g, true
				}
			}
		}
		if at.loss < best.loss {
			best = at
		}
	}
	return best
}

// part cuts the fleet between two sets of units.
func (f *fleet) part(stay, goes unitSet, cluster []crossing, limit int) (move, bool) {
	cut := f.cut(stay, goes, limit)
	if cut > limit {
		return move{}, false
	}
	m := move{loss: cut, moved: slices.Clone(f.moved)}
	for _, x := range cluster {
		if !m.moved[x.stays] && m.moved[x.goes] {
			m.loss -= x.weight
		}
	}
	return m, true
}

// apply returns c with the marked units moved as hypothesis k asks.
func (f *fleet) apply(c *config, k int, moved []bool) config {
	h := &f.hs[k]
	next := c.clone()
	d := f.displacement(c, k)
	for u, m := range moved {
		if m && c.comp[u] == c.comp[h.a] {
			next.at[u] = d.Mul(c.at[u])
		}
	}
	f.judge(&next)
	return next
}

// near marks the units that next has elsewhere than c, or the others if these are fewer.
func (f *fleet) near(c, next *config) []bool {
	near := make([]bool, f.n)
	changed := 0
	for u := range near {
		near[u] = next.at[u] != c.at[u]
		if near[u] {
			changed++
		}
	}
	if 2*changed > f.n {
		for u := range near {
			near[u] = !near[u]
		}
	}
	return near
}

// deepen improves a configuration that breaks k, if that is not negative, near to where it differs from c.
func (f *fleet) deepen(c, next *config, k int) {
	near := f.near(c, next)
	if k >= 0 {
		near[f.hs[k].a], near[f.hs[k].b] = true, true
	}
	f.improve(next, k, near)
}

// rival is an unsatisfied hypothesis and those that go along with it.
type rival struct {
	k, gain int
	cluster []crossing
}

// gainOf is the most that a rival gains.
func gainOf(rs []rival) int {
	if len(rs) == 0 {
		return 0
	}
	return rs[0].gain
}

// opposition lists the rivals of c, those with most to gain first; only those of units marked near, if that is given.
func (f *fleet) opposition(c *config, near []bool) []rival {
	var rs []rival
	for k := range f.hs {
		h := &f.hs[k]
		if c.holds[k] || h.weight == 0 || c.comp[h.a] != c.comp[h.b] || near != nil && !near[h.a] && !near[h.b] {
			continue
		}
		cs, gain := f.cluster(c, k)
		rs = append(rs, rival{k, gain, cs})
	}
	slices.SortFunc(rs, func(x, y rival) int {
		return cmp.Or(cmp.Compare(y.gain, x.gain), cmp.Compare(x.k, y.k))
	})
	return rs
}
