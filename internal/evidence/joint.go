package evidence

import (
	"cmp"
	"slices"

	"selvage/internal/lie"
)

// fleet weighs hypotheses against each other. A configuration gives every unit a place in its component; it satisfies a
// hypothesis if both units are in one component and lie to each other as the hypothesis says. Its score is the weight it
// satisfies.
type fleet struct {
	b  *body
	n  int // units
	hs []hypothesis

	// scratch of the moves
	capacity, flow []int // n x n
	queue, from    []int
	moved          []bool
}

type config struct {
	at    []lie.SE3 // component_from_unit
	comp  []int
	holds []bool // per hypothesis
	score int

	pa, qb [][3]float64 // per hypothesis: its mean place as either unit has it, in the component
}

func newFleet(b *body, hs []hypothesis) *fleet {
	n := len(b.tracks)
	return &fleet{b: b, n: n, hs: hs, capacity: make([]int, n*n), flow: make([]int, n*n),
		queue: make([]int, n), from: make([]int, n), moved: make([]bool, n)}
}

func (c *config) clone() config {
	return config{slices.Clone(c.at), slices.Clone(c.comp), slices.Clone(c.holds), c.score, slices.Clone(c.pa), slices.Clone(c.qb)}
}

// judge sets which hypotheses c satisfies, and its score.
func (f *fleet) judge(c *config) {
	c.score = 0
	for k := range f.hs {
		h := &f.hs[k]
		c.pa[k], c.qb[k] = c.at[h.a].Apply(h.pa), c.at[h.b].Apply(h.qb)
		c.holds[k] = false
		if c.comp[h.a] != c.comp[h.b] || far(&c.pa[k], &c.qb[k], h.shift) {
			continue
		}
		if h.turned(c.at[h.a].R.T().Mul(c.at[h.b].R)) {
			c.holds[k] = true
			c.score += h.weight
		}
	}
}

// grow joins the components with the most support, two at a time, until no hypothesis leads from one to another.
func (f *fleet) grow(c *config) {
	between := make([][]int, f.n*f.n) // hypotheses per pair of components
	for {
		f.judge(c)
		for i := range between {
			between[i] = between[i][:0]
		}
		for k := range f.hs {
			if p, q := c.comp[f.hs[k].a], c.comp[f.hs[k].b]; p != q {
				at := min(p, q)*f.n + max(p, q)
				between[at] = append(between[at], k)
			}
		}
		best, most := -1, 0
		for _, ks := range between {
			for _, k := range ks {
				if s := f.support(c, k, ks); s > most {
					best, most = k, s
				}
			}
		}
		if best < 0 {
			return
		}
		h := &f.hs[best]
		f.shift(c, c.comp[h.b], c.comp[h.a], f.displacement(c, best))
	}
}

// displacement is how the second unit of hypothesis k would have to be moved, in the component of the first, to satisfy it.
func (f *fleet) displacement(c *config, k int) lie.SE3 {
	h := &f.hs[k]
	return c.at[h.a].Mul(h.ab).Mul(c.at[h.b].Inv())
}

// support is the weight of those hypotheses that k agrees with, all of them between the same two components.
func (f *fleet) support(c *config, k int, among []int) int {
	d := f.displacement(c, k)
	sum := 0
	for _, m := range among {
		if c.comp[f.hs[m].b] == c.comp[f.hs[k].b] && f.forth(c, m, &d) || c.comp[f.hs[m].b] != c.comp[f.hs[k].b] && f.back(c, m, &d) {
			sum += f.hs[m].weight
		}
	}
	return sum
}

// forth tells whether m would be satisfied if its second unit were moved by d.
func (f *fleet) forth(c *config, m int, d *lie.SE3) bool {
	h := &f.hs[m]
	return !apartAfter(d, &c.qb[m], &c.pa[m], h.shift) && h.turned(c.at[h.a].R.T().Mul(d.R).Mul(c.at[h.b].R))
}

// back tells whether m would be satisfied if its first unit were moved by d.
func (f *fleet) back(c *config, m int, d *lie.SE3) bool {
	h := &f.hs[m]
	return !apartAfter(d, &c.pa[m], &c.qb[m], h.shift) && h.turned(d.R.Mul(c.at[h.a].R).T().Mul(c.at[h.b].R))
}

func far(p, q *[3]float64, limit float64) bool {
	x, y, z := p[0]-q[0], p[1]-q[1], p[2]-q[2]
	return x*x+y*y+z*z > limit*limit
}

// apartAfter tells whether p, moved by d, is more than limit away from q. It is what most of the search's time goes to.
func apartAfter(d *lie.SE3, p, q *[3]float64, limit float64) bool {
	x := d.R[0]*p[0] + d.R[1]*p[1] + d.R[2]*p[2] + d.T[0] - q[0]
	y := d.R[3]*p[0] + d.R[4]*p[1] + d.R[5]*p[2] + d.T[1] - q[1]
	z := d.R[6]*p[0] + d.R[7]*p[1] + d.R[8]*p[2] + d.T[2] - q[2]
	return x*x+y*y+z*z > limit*limit
}

// shift moves component from by d and makes it part of component to.
func (f *fleet) shift(c *config, from, to int, d lie.SE3) {
	for u := range c.comp {
		if c.comp[u] == from {
			c.at[u] = d.Mul(c.at[u])
			c.comp[u] = to
		}
	}
}

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
again:
	rs := f.opposition(c, nil)
	f.load(c)
	class := f.bound(slack + gainOf(rs))
	for _, r := range rs {
		if class[f.hs[r.k].a] == class[f.hs[r.k].b] {
			continue
		}
		f.load(c)
		m := f.move(c, r.cluster, r.gain, slack, nil)
		if m.loss > slack {
			continue
		}
		next := f.apply(c, r.k, m.moved)
		f.deepen(c, &next, -1)
		if next.score > c.score {
			*c = next
			f.improve(c, -1, nil)
			goto again
		}
	}
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
		m := f.move(c, cluster, gain, gain, nil)
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

// move finds the part whose moving costs least: the minimum cut that parts the units of the first of the cluster, less what
// the cluster gains. Others of the cluster are forced across one at a time while that pays. If apart names two units, they are
// parted as well. Cuts above limit are not told apart.
func (f *fleet) move(c *config, cluster []crossing, gain, limit int, apart []int) move {
	best := move{loss: limit + 1}
	for turn := 0; turn < 2; turn++ {
		var stay, go_ unitSet
		stay, go_ = newSet(f.n), newSet(f.n)
		stay.add(cluster[0].stays)
		go_.add(cluster[0].goes)
		if len(apart) == 2 {
			stay.add(apart[turn])
			go_.add(apart[1-turn])
		} else if turn == 1 {
			break
		}
		if stay.meets(go_) {
			continue
		}
		at, ok := f.part(stay, go_, cluster, limit+gain)
		if !ok {
			continue
		}
		for rising := true; rising; {
			rising = false
			for _, x := range cluster[1:] {
				if go_.has(x.stays) || stay.has(x.goes) || stay.has(x.stays) && go_.has(x.goes) {
					continue
				}
				s, g := stay.with(x.stays), go_.with(x.goes)
				if t, ok := f.part(s, g, cluster, at.loss+gain); ok && t.loss < at.loss {
					at, stay, go_, rising = t, s, g, true
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

// margins returns, for each hypothesis that c satisfies, by how much c beats the best configuration found in which it does not
// hold. Above limit it is only known to be no less. The way there may lead over one other configuration that is nearly as good.
// If one better than c turns up, c becomes that and the search starts again.
func (f *fleet) margins(c *config, limit int) []int {
	for {
		out, better := f.marginsOf(c, limit)
		if better == nil {
			return out
		}
		*c = *better
		f.settle(c)
	}
}

func (f *fleet) marginsOf(c *config, limit int) (out []int, better *config) {
	out = make([]int, len(f.hs))
	for k := range out {
		if c.holds[k] {
			out[k] = limit
		}
	}
	rs := f.opposition(c, nil)
	if better = f.lower(out, c, c, rs); better != nil {
		return nil, better
	}
	for _, next := range f.neighbours(c, rs, limit-1) {
		if better = f.lower(out, c, &next, f.opposition(&next, f.near(c, &next))); better != nil {
			return nil, better
		}
	}
	for k := range out {
		if !c.holds[k] {
			out[k] = -1
		}
	}
	return out, nil
}

// bases bounds how many configurations besides the best one are searched around.
const bases = 24

// neighbours returns the configurations one move away from c that lose not more than given, the best ones first.
func (f *fleet) neighbours(c *config, rs []rival, loss int) []config {
	var ns []config
	f.load(c)
	class := f.bound(loss + gainOf(rs))
	for _, r := range rs {
		if class[f.hs[r.k].a] == class[f.hs[r.k].b] {
			continue
		}
		m := f.move(c, r.cluster, r.gain, loss, nil)
		if m.loss > loss {
			continue
		}
		next := f.apply(c, r.k, m.moved)
		if !slices.ContainsFunc(ns, func(o config) bool { return slices.Equal(o.holds, next.holds) }) {
			ns = append(ns, next)
		}
	}
	slices.SortStableFunc(ns, func(x, y config) int { return cmp.Compare(y.score, x.score) })
	return ns[:min(len(ns), bases)]
}

// lower brings the margins in out, which are against c, down to what is found around the configuration at. It returns a
// configuration better than c as soon as it meets one.
func (f *fleet) lower(out []int, c, at *config, rs []rival) (better *config) {
	note := func(x *config) {
		for k := range out {
			if c.holds[k] && !x.holds[k] {
				out[k] = min(out[k], c.score-x.score)
			}
		}
	}
	note(at)
	lost := c.score - at.score
	f.load(at)
	top := slices.Max(append(out, 0)) - lost + slack
	class := f.bound(top + gainOf(rs))
	binds := make([]int, len(rs)) // what holds the units of each rival together
	for i, r := range rs {
		h := &f.hs[r.k]
		if binds[i] = top + r.gain + 1; class[h.a] != class[h.b] {
			binds[i] = f.cut(newSet(f.n).with(h.a), newSet(f.n).with(h.b), top+r.gain)
		}
	}
	for k := range f.hs {
		h := &f.hs[k]
		if !c.holds[k] || !at.holds[k] || class[h.a] == class[h.b] {
			continue
		}
		apart := [2]int{h.a, h.b}
		free := f.cut(newSet(f.n).with(h.a), newSet(f.n).with(h.b), top+gainOf(rs))
		out[k] = min(out[k], lost+free)
		for i, r := range rs {
			most := out[k] - lost + slack
			if free-r.gain > most {
				break
			}
			if binds[i]-r.gain > most || at.comp[f.hs[r.k].a] != at.comp[h.a] {
				continue
			}
			m := f.move(at, r.cluster, r.gain, most, apart[:])
			if m.loss > most {
				continue
			}
			next := f.apply(at, r.k, m.moved)
			if next.holds[k] {
				continue
			}
			f.deepen(at, &next, k)
			f.load(at)
			if next.score > c.score {
				return &next
			}
			note(&next)
		}
	}
	return nil
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
