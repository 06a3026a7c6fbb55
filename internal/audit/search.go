package audit

import (
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/reliability"
)

// search decides by graph search what no number can: bridges, sets that no test can tell apart, and places that carry alone.
func (w *work) search() error {
	class, factor := w.cuts()
	tie := make(map[int]int, len(w.p.Tie)) // factor -> tie
	for k, f := range w.p.Tie {
		if f >= 0 {
			tie[f] = k
		}
	}
	kinds := w.kinds()
	w.bridge = make([]bool, w.b.Len())
	sets := map[int32]*Set{}
	var order []int32
	for i, c := range class {
		k := factor[i]
		t, isTie := tie[k]
		if c == 0 {
			w.bridge[k] = true
			if isTie {
				w.out.Ties[t].Bridge = true
				w.out.Bridges = append(w.out.Bridges, w.out.Ties[t].ID)
			}
			continue
		}
		s := sets[c]
		if s == nil {
			s = &Set{}
			sets[c] = s
			order = append(order, c)
		}
		switch {
		case isTie:
			s.Ties = append(s.Ties, w.out.Ties[t].ID)
		case kinds[k] == closure:
			s.Closures++
		default:
			s.Odometry++
		}
	}
	number := map[int32]int{}
	for _, c := range order {
		if s := sets[c]; len(s.Ties) > 0 && len(s.Ties)+s.Odometry+s.Closures > 1 {
			w.out.Sets = append(w.out.Sets, *s)
			number[c] = len(w.out.Sets)
		}
	}
	for i, c := range class {
		if t, isTie := tie[factor[i]]; isTie {
			w.out.Ties[t].Set = number[c]
		}
	}
	w.places()
	return nil
}

// cuts returns the factors that count and their classes, see [reliability.Cuts].
func (w *work) cuts() (class []int32, factor []int) {
	var edges [][2]int32
	for k := range w.b.I {
		if w.b.W[k] != 0 {
			edges, factor = append(edges, [2]int32{w.b.I[k], w.b.J[k]}), append(factor, k)
		}
	}
	return reliability.Cuts(len(w.p.Keys), edges), factor
}

// Classes of measurement.
const (
	odometry = iota
	closure
	between
)

var classNames = [...]string{odometry: "odometry", closure: "closure", between: "tie"}

// kinds returns the class of every factor: the measurements of the robots come first, in their order; what was added behind them is a
// tie, or the second half of an odometry step that was split at a moment.
func (w *work) kinds() []int {
	all := make([]int, w.b.Len())
	k := 0
	for i := range w.s.Robots {
		for _, r := range w.s.Robots[i].Relatives {
			if r.Kind != 0 {
				all[k] = closure
			}
			k++
		}
	}
	for _, f := range w.p.Tie {
		if f >= 0 {
			all[f] = between
		}
	}
	return all
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
		ends := [2]int32{w.b.I[t.factor], w.b.J[t.factor]}
		island := w.p.Island[ends[0]]
		var home *place
	search:
		for _, v := range ends {
			at := position(v)
			for o := range 27 {
				near := [3]int32{int32(o%3) - 1, int32(o/3%3) - 1, int32(o/9) - 1}
				for _, p := range cells[cell(at, near)] {
					f := w.out.Ties[p.ties[0]].factor
					if w.p.Island[w.b.I[f]] != island {
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
	island := w.p.Island[w.b.I[w.out.Ties[ties[0]].factor]]
	next := 0
	members := map[int32]bool{}
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if !t.held || w.p.Island[w.b.I[t.factor]] != island {
			continue
		}
		a, b := w.unit[w.b.I[t.factor]], w.unit[w.b.J[t.factor]]
		members[a], members[b] = true, true
		if next < len(ties) && ties[next] == k {
			next++
			continue
		}
		without.join(a, b)
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

func distance(a, b [3]float64) float64 {
	return math.Sqrt((a[0]-b[0])*(a[0]-b[0]) + (a[1]-b[1])*(a[1]-b[1]) + (a[2]-b[2])*(a[2]-b[2]))
}
