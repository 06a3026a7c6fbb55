package evidence

import (
	"cmp"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"selvage/internal/lie"
)

// most is how many ties of one pair are compared with each other; of more, an even choice along the track is. The others are
// judged by the prediction.
const most = 256

// rivals is how many hypotheses a pair may have.
const rivals = 3

// body is what all steps share: the units, the ties, and the bounds.
type body struct {
	o      Options
	tracks []*track
	links  []link
	ids    []string // of the ties
	gate   float64  // bound on squared Mahalanobis distances
	refuse float64  // the same for refusal
	dof    int
	give   []float64    // per unit: how far its heading may be off from end to end, rad
	reach  []float64    // per unit: root mean square distance of its nodes from their mean, m
	spread [][3]float64 // per unit: second moments xx, xy, yy of its nodes about their mean, m^2, in its horizontal plane
	yaw    [][]float64  // per pair of units: headings of nodes against each other, made when asked for
}

func newBody(units []Unit, ties []Tie, o Options) *body {
	b := &body{o: o, dof: 6}
	if o.Dim == 2 {
		b.dof = 3
	}
	chi := distuv.ChiSquared{K: float64(b.dof)}
	b.gate = chi.Quantile(o.Gate)
	b.refuse = chi.Quantile(1 - (1-o.Gate)/10)
	b.tracks = make([]*track, len(units))
	b.spread = make([][3]float64, len(units))
	b.give = make([]float64, len(units))
	b.reach = make([]float64, len(units))
	for i := range units {
		t := newTrack(&units[i], &o)
		b.tracks[i] = t
		n := len(t.Poses)
		if n == 0 {
			continue
		}
		b.give[i] = math.Min(0.2, o.BiasYaw*(t.TravelM[n-1]-t.TravelM[0])/math.Sqrt(12))
		b.spread[i] = t.spread()
		b.reach[i] = math.Sqrt(b.spread[i][0] + b.spread[i][2])
	}
	b.links, b.ids = make([]link, len(ties)), make([]string, len(ties))
	for i := range ties {
		b.ids[i] = ties[i].Name
		b.links[i] = linkOf(&ties[i], o.Dim)
	}
	return b
}

func (t *track) spread() (m [3]float64) {
	n := float64(len(t.Poses))
	var mx, my float64
	for k := range t.Poses {
		mx += t.Poses[k].T[0] / n
		my += t.Poses[k].T[1] / n
	}
	for k := range t.Poses {
		dx, dy := t.Poses[k].T[0]-mx, t.Poses[k].T[1]-my
		m[0] += dx * dx / n
		m[1] += dx * dy / n
		m[2] += dy * dy / n
	}
	return m
}

// hypothesis is a consistent set while it is being weighed.
type hypothesis struct {
	a, b    int
	members []int // ties, ascending
	spots   []int // one tie per place
	weight  int
	ab      lie.SE3    // a_from_b
	pa, qb  [3]float64 // the mean place, in a and in b
	chance  float64    // that two unrelated ties of this pair agree as well as its neighbouring places do
	count   int        // places of all ties of the pair
	shift   float64    // m, and
	trace   float64    // of the rotation: how far off counts as agreement
	blurred bool       // a search of its pair was cut short
}

// pairs groups the ties by pair of units, in ascending order of the pair, ties ascending.
func (b *body) pairs() [][]int {
	order := make([]int, len(b.links))
	for i := range order {
		order[i] = i
	}
	slices.SortFunc(order, func(x, y int) int {
		l, m := &b.links[x], &b.links[y]
		return cmp.Or(cmp.Compare(l.a, m.a), cmp.Compare(l.b, m.b), cmp.Compare(x, y))
	})
	var groups [][]int
	for s := 0; s < len(order); {
		e := s + 1
		for e < len(order) && b.links[order[e]].a == b.links[order[s]].a && b.links[order[e]].b == b.links[order[s]].b {
			e++
		}
		groups = append(groups, order[s:e:e])
		s = e
	}
	return groups
}

// choose returns at most limit of the ties, evenly along the track of the first unit.
func (b *body) choose(ties []int, limit int) []int {
	if len(ties) <= limit {
		return ties
	}
	along := slices.Clone(ties)
	slices.SortFunc(along, func(x, y int) int {
		return cmp.Or(cmp.Compare(b.links[x].i, b.links[y].i), cmp.Compare(x, y))
	})
	out := make([]int, limit)
	for k := range out {
		out[k] = along[k*len(along)/limit]
	}
	slices.Sort(out)
	return out
}

// consistency tests all ties of one pair against each other.
func (b *body) consistency(ties []int) *graph {
	g := newGraph(len(ties))
	for p := range ties {
		for q := p + 1; q < len(ties); q++ {
			if b.misfit(ties[p], ties[q]) < b.gate {
				g.connect(p, q)
			}
		}
	}
	return g
}

// misfit is the squared Mahalanobis distance of the loop through two ties of one pair.
func (b *body) misfit(p, q int) float64 {
	l, m := &b.links[p], &b.links[q]
	d := detour(b.tracks[l.a], b.tracks[l.b], l, m)
	e, c := d.misclosure(l)
	return mahalanobis(&e, &c, b.o.Dim)
}

// hypothesise returns the largest disjoint consistent sets of one pair's ties that differ in where they put the units.
func (b *body) hypothesise(ties []int) []hypothesis {
	ties = b.choose(ties, most)
	g := b.consistency(ties)
	free := make([]uint64, g.words)
	for i := range ties {
		free[i>>6] |= 1 << (i & 63)
	}
	count := len(b.places(ties))
	var hs []hypothesis
	blurred := false
	left := len(ties)
	for left > 0 && len(hs) < rivals {
		clique, exact := g.clique(free, b.o.CliqueEffort)
		if len(clique) == 0 { // not even one step was allowed
			blurred = true
			break
		}
		// A search cut short leaves a doubt only if nothing of it is searched again: what the clique found does not cover is.
		blurred = blurred || !exact && len(hs) > 0
		members := make([]int, len(clique))
		for k, v := range clique {
			members[k] = ties[v]
			free[v>>6] &^= 1 << (v & 63)
		}
		left -= len(clique)
		h := hypothesis{a: b.links[members[0]].a, b: b.links[members[0]].b, members: members, count: count}
		h.spots = b.places(members)
		h.weight = len(h.spots)
		b.fit(&h)
		b.grant(&h)
		h.chance = b.accident(&h)
		// A set that says the same as one before it would count the same places twice.
		if !slices.ContainsFunc(hs, func(k hypothesis) bool { return h.agrees(&k.ab) }) {
			hs = append(hs, h)
		}
	}
	for i := range hs {
		hs[i].blurred = blurred
	}
	return hs
}

// places chooses ties that rest on different places, as many as a greedy walk along either track finds.
func (b *body) places(ties []int) []int {
	var best []int
	for side := 0; side < 2; side++ {
		order := slices.Clone(ties)
		slices.SortFunc(order, func(x, y int) int {
			l, m := &b.links[x], &b.links[y]
			if side == 0 {
				return cmp.Or(cmp.Compare(l.i, m.i), cmp.Compare(l.j, m.j), cmp.Compare(x, y))
			}
			return cmp.Or(cmp.Compare(l.j, m.j), cmp.Compare(l.i, m.i), cmp.Compare(x, y))
		})
		var spots []int
		for _, x := range order {
			if !slices.ContainsFunc(spots, func(y int) bool { return !b.apart(x, y) }) {
				spots = append(spots, x)
			}
		}
		if len(spots) > len(best) {
			best = spots
		}
	}
	return best
}

// apart tells whether two ties of one pair rest on different places.
func (b *body) apart(x, y int) bool {
	l, m := &b.links[x], &b.links[y]
	return b.tracks[l.a].apart(l.i, m.i, b.o.PlaceM) && b.tracks[l.b].apart(l.j, m.j, b.o.PlaceM)
}

func (t *track) apart(i, j int, place float64) bool {
	return math.Abs(t.TravelM[i]-t.TravelM[j]) > place && distance(t.Poses[i].T, t.Poses[j].T) > place/2
}

func distance(p, q [3]float64) float64 {
	x, y, z := p[0]-q[0], p[1]-q[1], p[2]-q[2]
	return math.Sqrt(x*x + y*y + z*z)
}

// fit finds the rigid motion a_from_b that the members of h agree on best: the chordal mean of their rotations, helped by
// their positions, which carry the heading better where the places are far apart.
func (b *body) fit(h *hypothesis) {
	a, c := b.tracks[h.a], b.tracks[h.b]
	n := float64(len(h.members))
	h.pa, h.qb = [3]float64{}, [3]float64{}
	for _, x := range h.members {
		l := &b.links[x]
		p := a.Poses[l.i].Apply(l.z.T)
		q := c.Poses[l.j].T
		for k := 0; k < 3; k++ {
			h.pa[k] += p[k] / n
			h.qb[k] += q[k] / n
		}
	}
	var m lie.Mat3
	for _, x := range h.members {
		l := &b.links[x]
		p := a.Poses[l.i].Apply(l.z.T)
		q := c.Poses[l.j].T
		r := a.Poses[l.i].R.Mul(l.z.R).Mul(c.Poses[l.j].R.T())
		turns, shifts := l.c.S[8], l.c.P[0]+l.c.P[4]
		kappa, tau := 1/(turns+0.02*0.02), 1/(shifts+0.3*0.3)
		for i := 0; i < 3; i++ {
			for j := 0; j < 3; j++ {
				m[3*i+j] += kappa*r[3*i+j] + tau*(p[i]-h.pa[i])*(q[j]-h.qb[j])
			}
		}
	}
	r, ok := lie.NearestRotation(&m)
	if !ok {
		l := &b.links[h.members[0]]
		r = a.Poses[l.i].R.Mul(l.z.R).Mul(c.Poses[l.j].R.T())
	}
	q := r.Apply(h.qb)
	h.ab = lie.SE3{R: r, T: [3]float64{h.pa[0] - q[0], h.pa[1] - q[1], h.pa[2] - q[2]}}
	if b.o.Dim == 2 {
		s := lie.Planar(&h.ab)
		k := math.Hypot(s.C, s.S)
		s.C, s.S = s.C/k, s.S/k
		h.ab = s.Spatial()
	}
}

// agrees tells whether the motion a_from_b puts the units where h does, near the mean place of h, within what the units'
// own deformation may take. It is coarse on purpose: rivals may not escape it, and what is believed is tested again by loops.
func (h *hypothesis) agrees(ab *lie.SE3) bool {
	return distance(ab.Apply(h.qb), h.pa) <= h.shift && h.turned(ab.R)
}

// turned tells whether the rotation r is that of h within what it grants.
func (h *hypothesis) turned(r lie.Mat3) bool {
	tr := 0.0 // of h.ab.R' r, which is 1 + 2 cos(angle)
	for i := range r {
		tr += r[i] * h.ab.R[i]
	}
	return tr >= h.trace
}

// grant sets how far units may be from where h puts them and still satisfy it.
func (b *body) grant(h *hypothesis) {
	h.shift = math.Min(5, 1.5+0.5*(b.give[h.a]*b.reach[h.a]+b.give[h.b]*b.reach[h.b]))
	h.trace = 1 + 2*math.Cos(0.06+b.give[h.a]+b.give[h.b])
}
