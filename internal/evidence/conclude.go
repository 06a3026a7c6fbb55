package evidence

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"selvage/internal/lie"
)

// conclude turns what was weighed into findings: the ties of held hypotheses are tested against each other, all others against
// the prediction from those.
func (b *body) conclude(f *fleet, w weighed) Result {
	n := len(b.tracks)
	r := Result{
		Ties:          make([]Finding, len(b.links)),
		Hypotheses:    make([]Hypothesis, len(f.hs)),
		Island:        make([]int, n),
		DatumFromUnit: make([]lie.SE3, n),
	}
	for i := range r.Ties {
		r.Ties[i] = Finding{Hypothesis: -1}
	}
	var core []int
	at := map[[2]int]int{} // pair -> index in same, looked up only
	var same [][]int
	for k := range f.hs {
		h := &f.hs[k]
		r.Hypotheses[k] = Hypothesis{A: h.a, B: h.b, Ties: h.members, Places: len(h.spots), AFromB: h.ab, Margin: w.margin[k],
			Cycle: w.cycle[k], Chance: w.expected[k], Held: w.held[k]}
		for _, t := range h.members {
			r.Ties[t].Hypothesis, r.Ties[t].Places, r.Ties[t].Margin = k, len(h.spots), w.margin[k]
		}
		if w.held[k] {
			core = append(core, h.members...)
			key := [2]int{h.a, h.b}
			if _, ok := at[key]; !ok {
				at[key] = len(same)
				same = append(same, nil)
			}
			same[at[key]] = append(same[at[key]], h.members...)
		}
	}
	slices.Sort(core)
	b.islands(f, w.held, &r)
	a := newAtlas(b, core)
	ps := make([]prediction, len(b.links))
	inCore := make([]bool, len(b.links))
	for _, t := range core {
		inCore[t] = true
	}
	var shares []float64 // of the ties that nothing but the prediction speaks for
	for t := range b.links {
		l := &b.links[t]
		if r.Island[l.a] != r.Island[l.b] {
			continue
		}
		var mates []int
		if i, ok := at[[2]int{l.a, l.b}]; ok {
			mates = same[i]
		}
		ps[t] = b.predict(t, mates, a)
		if ps[t].ways > 0 && !inCore[t] {
			shares = append(shares, ps[t].share)
		}
	}
	tight := tightness(shares, b.o.Accidents)
	for t := range b.links {
		l := &b.links[t]
		if r.Island[l.a] != r.Island[l.b] {
			b.undetermined(t, f, &w, &r)
			continue
		}
		x := &r.Ties[t]
		var mates []int
		if i, ok := at[[2]int{l.a, l.b}]; ok {
			mates = same[i]
		}
		b.find(x, t, &ps[t], tight, mates)
		if x.Verdict != Held {
			continue
		}
		if q, way := b.crossing(t, a); q.ways > 0 && q.squared >= b.refusal(&q) {
			x.Verdict, x.Statistic, x.Limit = Open, q.squared, b.refusal(&q)
			x.Reason = b.crossed(t, &q, way)
		}
	}
	b.part(&r)
	return r
}

// tightness returns the share below which predictions count: if all these ties were false, not more than the given number of
// them would be expected to pass.
func tightness(shares []float64, accidents float64) float64 {
	slices.Sort(shares)
	sum := 0.0
	for _, p := range shares {
		if sum += p; sum > accidents {
			return p
		}
	}
	return math.Inf(1)
}

// find writes the verdict on tie t within an island; mates are the ties of its pair that are held.
func (b *body) find(x *Finding, t int, p *prediction, tight float64, mates []int) {
	if p.ways == 0 {
		x.Reason = b.onePlace(t)
		return
	}
	x.Statistic, x.DoF, x.Limit = p.squared, b.dof, b.gate
	refuse := b.refusal(p)
	loose := p.share >= min(tight, b.o.Accidents)
	switch {
	case p.squared >= refuse:
		x.Verdict, x.Limit = Refused, refuse
		x.Reason = fmt.Sprintf("contradicted by the ties held: misclosure %.1f, bound %.1f, by %d ways around", p.squared, refuse, p.ways)
	case p.squared >= b.gate:
		x.Reason = b.badly(t, p)
	case loose:
		x.Reason = b.faraway(t, mates)
	default:
		x.Verdict = Held
		x.Reason = fmt.Sprintf("agrees with the ties held: misclosure %.1f, bound %.1f", p.squared, b.gate)
	}
}

// islands joins the units over the held hypotheses, the strongest first, and gives each its place in the frame of the lowest.
func (b *body) islands(f *fleet, held []bool, r *Result) {
	var order []int
	for k := range f.hs {
		if held[k] {
			order = append(order, k)
		}
	}
	slices.SortFunc(order, func(x, y int) int {
		return cmp.Or(cmp.Compare(f.hs[y].weight, f.hs[x].weight), cmp.Compare(x, y))
	})
	comp := make([]int, len(b.tracks))
	at := r.DatumFromUnit
	for u := range comp {
		comp[u], at[u] = u, lie.Identity()
	}
	for _, k := range order {
		h := &f.hs[k]
		from, to := comp[h.b], comp[h.a]
		if from == to {
			continue
		}
		d := at[h.a].Mul(h.ab).Mul(at[h.b].Inv())
		for u := range comp {
			if comp[u] == from {
				comp[u], at[u] = to, d.Mul(at[u])
			}
		}
	}
	r.number(comp)
}

// part makes islands of what held ties connect: a unit whose ties were all found wanting is on its own after all.
func (b *body) part(r *Result) {
	comp := make([]int, len(b.tracks))
	for u := range comp {
		comp[u] = u
	}
	for t := range b.links {
		if r.Ties[t].Verdict == Held {
			merge(comp, b.links[t].a, b.links[t].b)
		}
	}
	for u := range comp {
		comp[u] = root(comp, u)
	}
	r.number(comp)
}

// number numbers the islands by their lowest unit and takes each into the frame of that.
func (r *Result) number(comp []int) {
	count := 0
	for u := range comp {
		first := slices.Index(comp, comp[u])
		if first == u {
			r.Island[u] = count
			count++
			continue
		}
		r.Island[u] = r.Island[first]
	}
	at := r.DatumFromUnit
	for u := len(comp) - 1; u >= 0; u-- { // the lowest last: the others need it as it was
		at[u] = at[slices.Index(comp, comp[u])].Between(at[u])
	}
}
