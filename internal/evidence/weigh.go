package evidence

import "slices"

// weighed is what the fleet as a whole says about each hypothesis.
type weighed struct {
	c        config
	margin   []int
	cycle    []bool
	expected []float64
	held     []bool
	frail    []bool // two places struck out would part its units
}

// weigh finds the best configuration, tests what it satisfies by loops, and asks each hypothesis for its margin. pairs is how
// many pairs of units were looked at.
func (f *fleet) weigh(pairs int) weighed {
	o := &f.b.o
	c := f.best()
	if f.demote(&c) {
		f.judge(&c)
		f.settle(&c)
	}
	limit := max(o.CycleMargin, o.BridgeMargin)
	n := len(f.hs)
	w := weighed{config{}, f.margins(&c, limit), make([]bool, n), make([]float64, n), make([]bool, n), make([]bool, n)}
	w.c = c
	f.load(&c)
	class := f.firm(&c)
	for k := range f.hs {
		h := &f.hs[k]
		w.expected[k] = expected(pairs, max(h.count, h.weight), h.weight, h.chance)
		if !c.holds[k] {
			continue
		}
		if class[h.a] != class[h.b] {
			w.margin[k], w.frail[k] = min(w.margin[k], strikes, o.CycleMargin-1), true
		}
		w.cycle[k] = f.confirmed(h)
		need := o.BridgeMargin
		if w.cycle[k] {
			need = o.CycleMargin
		}
		w.held[k] = h.weight > 0 && w.margin[k] >= need && !h.blurred && (w.cycle[k] || w.expected[k] < o.Chance)
	}
	return w
}

// confirmed tells whether the units of h are bound to each other by other pairs as well.
func (f *fleet) confirmed(h *hypothesis) bool {
	p, q := h.a*f.n+h.b, h.b*f.n+h.a
	own := f.capacity[p]
	f.capacity[p], f.capacity[q] = 0, 0
	other := f.cut(newSet(f.n).with(h.a), newSet(f.n).with(h.b), 0)
	f.capacity[p], f.capacity[q] = own, own
	return other > 0
}

// demote takes the weight from hypotheses that c satisfies in the large but that a loop through other units contradicts, or
// that a loop too loose to be a witness is all that confirms. It reports whether there were any.
func (f *fleet) demote(c *config) bool {
	var spots []int
	for k := range f.hs {
		if c.holds[k] {
			spots = append(spots, f.hs[k].spots...)
		}
	}
	slices.Sort(spots)
	a := newAtlas(f.b, spots)
	f.load(c)
	var out []int
	for k := range f.hs {
		h := &f.hs[k]
		if !c.holds[k] || !f.confirmed(h) {
			continue
		}
		// False sets of this weight that might be here by accident.
		others := 1
		for m := range f.hs {
			if !c.holds[m] && f.hs[m].weight >= h.weight {
				others++
			}
		}
		if !f.proven(a, h, 0.05/float64(others)) {
			out = append(out, k)
		}
	}
	for _, k := range out {
		f.hs[k].weight = 0
	}
	return len(out) > 0
}

// proven tells whether a loop through other units closes on a place of h, tightly enough that not more than share of all poses
// would have closed.
func (f *fleet) proven(a *atlas, h *hypothesis, share float64) bool {
	b := f.b
	for k := 0; k < len(h.spots); k++ {
		l := &b.links[h.spots[k]]
		ties, ok := a.walk(l, func(x int) bool { return b.links[x].a == h.a && b.links[x].b == h.b })
		if !ok {
			return true
		}
		p := b.through(l, ties)
		e, c := p.misclosure(l)
		if mahalanobis(&e, &c, b.o.Dim) < b.gate && b.share(&c, l.a, l.b) < share {
			return true
		}
	}
	return false
}
