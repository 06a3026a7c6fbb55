package evidence

import (
	"cmp"
	"slices"
)

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
	for i, next := range f.neighbours(c, rs, limit-1) {
		near := f.near(c, &next)
		if i >= bases { // cut short: nothing is known of what lies there
			for k := range f.hs {
				if h := &f.hs[k]; near[h.a] || near[h.b] {
					out[k] = min(out[k], 0)
				}
			}
			continue
		}
		if better = f.lower(out, c, &next, f.opposition(&next, near)); better != nil {
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
const bases = 64

// neighbours returns the configurations one move away from c that lose not more than given, the best ones first.
func (f *fleet) neighbours(c *config, rs []rival, loss int) []config {
	var ns []config
	f.load(c)
	class := f.bound(loss + gainOf(rs))
	for _, r := range rs {
		if class[f.hs[r.k].a] == class[f.hs[r.k].b] {
			continue
		}
		m := f.move(r.cluster, r.gain, loss, nil)
		if m.loss > loss {
			continue
		}
		next := f.apply(c, r.k, m.moved)
		if !slices.ContainsFunc(ns, func(o config) bool { return slices.Equal(o.holds, next.holds) }) {
			ns = append(ns, next)
		}
	}
	slices.SortStableFunc(ns, func(x, y config) int { return cmp.Compare(y.score, x.score) })
	return ns
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
			m := f.move(r.cluster, r.gain, most, apart[:])
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
