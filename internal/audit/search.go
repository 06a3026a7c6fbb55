package audit

import (
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/reliability"
)

// search decides by graph search what no number can: bridges, sets that no test can tell apart, and places that carry alone. Sightings
// and ties that are less than a pose count as if they held all of a pose: what lies on no loop even so is checked by nothing, and
// what two cuts part even so are on the same loops. What they do hold is a matter of rank, and of numbers.
func (w *work) search() error {
	cut := w.cuts()
	w.alone = make([]bool, len(w.all))
	sets := map[int32]*Set{}
	var order []int32
	for i, c := range cut {
		if c <= 0 {
			w.alone[i] = c == 0
			continue
		}
		s := sets[c]
		if s == nil {
			s = &Set{}
			sets[c] = s
			order = append(order, c)
		}
		switch {
		case w.tie[i] >= 0:
			s.Ties = append(s.Ties, w.out.Ties[w.tie[i]].ID)
		case w.sort[i] == closure:
			s.Closures++
		case w.sort[i] == sighting:
			s.Sightings++
		case w.sort[i] == odometry:
			s.Odometry++
		}
	}
	number := map[int32]int{}
	for _, c := range order {
		if s := sets[c]; len(s.Ties) > 0 && len(s.Ties)+s.Odometry+s.Closures+s.Sightings > 1 {
			w.out.Sets = append(w.out.Sets, *s)
			number[c] = len(w.out.Sets)
		}
	}
	for i, c := range cut {
		if t := w.tie[i]; t >= 0 && c > 0 {
			w.out.Ties[t].Set = number[c]
		}
	}
	w.bridges()
	w.places()
	return nil
}

// cuts returns the class of every measurement, see [reliability.Cuts]; -1 for those that do not count.
func (w *work) cuts() []int32 {
	out := make([]int32, len(w.all))
	var edges [][2]int32
	var at []int
	datum := int32(w.p.Graph.Variables()) // what control points are measured from
	for i, m := range w.all {
		out[i] = -1
		if *m.weight() == 0 {
			continue
		}
		var e [2]int32
		switch {
		case m.poses != nil:
			e = [2]int32{m.poses.I[m.k], m.poses.J[m.k]}
		case m.priors != nil:
			e = [2]int32{datum, w.p.Graph.Point(m.priors.Point(m.k))}
		case m.sights.OfPoints():
			e = [2]int32{m.sights.From[m.k], w.p.Graph.Point(m.sights.To[m.k])}
		default:
			e = [2]int32{m.sights.From[m.k], m.sights.To[m.k]}
		}
		edges, at = append(edges, e), append(at, i)
	}
	for k, c := range reliability.Cuts(int(datum)+1, edges) {
		out[at[k]] = c
	}
	return out
}

// loners says of every measurement whether it lies on no loop.
func (w *work) loners() []bool {
	out := make([]bool, len(w.all))
	for i, c := range w.cuts() {
		out[i] = c == 0
	}
	return out
}

// class of measurement.
type class int

const (
	odometry class = iota
	closure
	between
	partial
	sighting
	control
)

// classNames are those of which a robot has sigmas.
var classNames = [...]string{odometry: "odometry", closure: "closure", between: "tie", partial: "partial tie", sighting: "sighting"}

// index is the place of a held measurement in the list of all.
func (w *work) index(m measurement) int {
	if m.poses != nil {
		return m.k
	}
	return w.at[m]
}

// bridges notes the held ties whose loss would part the fleet: whole poses on no loop. Where there are sightings, those without
// which frames would be loose by rank; such a tie may still be checked in part.
func (w *work) bridges() {
	wanted := make([]bool, len(w.out.Ties))
	if w.out.sighted {
		for _, k := range w.rigid.Wanted() {
			wanted[k] = true
		}
	}
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if t.held && (wanted[k] || t.m.poses != nil && w.alone[t.m.k]) {
			t.Bridge = true
			w.out.Bridges = append(w.out.Bridges, t.ID)
		}
	}
}

// places finds the places whose ties are all that joins two parts of an island. Ties belong to one place when they lie within the
// distance at which two ties count as two witnesses, seen from the first of the place at either end.
func (w *work) places() {
	reach := evidence.DefaultOptions(w.out.Dimension).PlaceM
	type place struct {
		ties    []int
		centres [2][3]float64
	}
	var all []*place
	cells := map[[3]int32][]*place{}
	cell := func(p [3]float64, o [3]int32) (c [3]int32) {
		for i := range c {
			c[i] = int32(math.Floor(p[i]/reach)) + o[i]
		}
		return c
	}
	position := func(v int32) [3]float64 { return w.p.Graph.Values.Poses[v].T }
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if !t.held {
			continue
		}
		ends := [2]int32{t.i, t.j}
		island := w.p.Island[ends[0]]
		var home *place
	search:
		for _, v := range ends {
			at := position(v)
			for o := range 27 {
				near := [3]int32{int32(o%3) - 1, int32(o/3%3) - 1, int32(o/9) - 1}
				for _, p := range cells[cell(at, near)] {
					if w.p.Island[w.out.Ties[p.ties[0]].i] != island {
						continue
					}
					if distance(at, p.centres[0]) <= reach || distance(at, p.centres[1]) <= reach {
						home = p
						break search
					}
				}
			}
		}
		if home != nil {
			home.ties = append(home.ties, k)
			continue
		}
		home = &place{ties: []int{k}, centres: [2][3]float64{position(ends[0]), position(ends[1])}}
		all = append(all, home)
		for _, c := range home.centres {
			at := cell(c, [3]int32{})
			if !slices.Contains(cells[at], home) {
				cells[at] = append(cells[at], home)
			}
		}
	}
	for _, p := range all {
		if lost := w.lost(p.ties); lost != nil {
			named := Place{}
			for _, k := range p.ties {
				named.Ties = append(named.Ties, w.out.Ties[k].ID)
				w.out.Ties[k].Place = true
			}
			for _, u := range lost {
				named.Parts = append(named.Parts, w.unitName(u))
			}
			w.out.Places = append(w.out.Places, named)
		}
	}
}

// lost returns the units that the rest of their island would lose with some held ties: those of all parts but the largest; nil when
// nothing falls apart. Sessions that fall apart by themselves count as one.
func (w *work) lost(ties []int) []int32 {
	without := newGroups(len(w.units))
	island := w.p.Island[w.out.Ties[ties[0]].i]
	members := map[int32]bool{}
	gone := make(map[int]bool, len(ties))
	for _, k := range ties {
		gone[k] = true
	}
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if !t.held || w.p.Island[t.i] != island {
			continue
		}
		a, b := w.unit[t.i], w.unit[t.j]
		members[a], members[b] = true, true
		if !gone[k] && t.m.poses != nil {
			without.join(a, b)
		}
	}
	if w.out.sighted && !without.one(members) {
		first := map[int32]int32{} // group -> unit
		for v, g := range w.rigid.Islands(func(tie, _ int) bool { return tie >= 0 && gone[tie] }) {
			u := w.unit[v]
			if f, seen := first[g]; seen {
				without.join(f, u)
			} else {
				first[g] = u
			}
		}
	}
	size := map[int32]int{}
	var roots []int32
	for u := range int32(len(w.units)) {
		if members[u] {
			r := without.root(u)
			if size[r] == 0 {
				roots = append(roots, r)
			}
			size[r]++
		}
	}
	if len(roots) < 2 {
		return nil
	}
	largest := roots[0]
	for _, r := range roots {
		if size[r] > size[largest] {
			largest = r
		}
	}
	var out []int32
	for u := range int32(len(w.units)) {
		if members[u] && without.root(u) != largest {
			out = append(out, u)
		}
	}
	return out
}

// one tells whether all members are in one set.
func (g groups) one(members map[int32]bool) bool {
	first := int32(-1)
	for u := range members {
		if r := g.root(u); first < 0 {
			first = r
		} else if r != first {
			return false
		}
	}
	return true
}

func distance(a, b [3]float64) float64 {
	return math.Sqrt((a[0]-b[0])*(a[0]-b[0]) + (a[1]-b[1])*(a[1]-b[1]) + (a[2]-b[2])*(a[2]-b[2]))
}
