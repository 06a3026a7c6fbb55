package audit

import (
	"math"
	"slices"

	"selvage/internal/reliability"
	"selvage/internal/sparse"
)

// Near is a set of ties that a test can hardly tell apart: each is joined to another of the set by tests of a correlation above
// [inseparable].
type Near struct {
	Ties        []string `json:"ties"`
	Correlation float64  `json:"correlation"` // the least by which one is joined to the set
}

// inseparable is the correlation of two tests from which on an error in one measurement is likely taken for one in the other.
const inseparable = 0.99

// comparison correlates the tests of ties with each other.
type comparison struct {
	all   []shadow
	slot  []int32   // variable -> row of ends, -1 for what is no end of a tie
	ends  []float64 // what the ends move by: wide rows of [sparse.Together] columns for each
	wide  int
	g     groups            // of hardly told apart
	least map[int32]float64 // root -> least correlation by which one is joined to the set
}

// shadow is what the correlation of the test of a tie with others takes.
type shadow struct {
	t    *Tie
	dof  int
	h    []float64    // see [reliability.Parts]: for the tie whose error moves the ends of others
	at   [2]int32     // slots of its ends
	k    [2][]float64 // J' f of each end, wide x dof: for the others
	wide [2]int
}

// newComparison prepares it for ties that are tested.
func (w *work) newComparison(jobs []*Tie) *comparison {
	c := &comparison{all: make([]shadow, len(jobs)), slot: make([]int32, w.p.Graph.Variables()), wide: w.d, g: newGroups(len(jobs)), least: map[int32]float64{}}
	for v := range c.slot {
		c.slot[v] = -1
	}
	slots := int32(0)
	for i, t := range jobs {
		s := &c.all[i]
		s.t = t
		var f []float64
		f, s.h, s.dof = reliability.Parts(w.info(t.m), w.predicted(t.m))
		d := w.derivative(t.m)
		for e, j := range d.by {
			v := d.at[e]
			if c.slot[v] < 0 {
				c.slot[v] = slots
				slots++
			}
			s.at[e], s.wide[e] = c.slot[v], len(j)/d.rows
			s.k[e] = make([]float64, s.wide[e]*s.dof)
			for r := range d.rows {
				for a := range s.wide[e] {
					for k := range s.dof {
						s.k[e][a*s.dof+k] += j[r*s.wide[e]+a] * f[r*s.dof+k]
					}
				}
			}
		}
	}
	c.ends = make([]float64, int(slots)*c.wide*sparse.Together) // what is fixed stays zero
	return c
}

// keep notes what a variable moves by.
func (c *comparison) keep(variable int32, x []float64) {
	if s := c.slot[variable]; s >= 0 {
		copy(c.ends[int(s)*c.wide*sparse.Together:], x)
	}
}

// compare correlates the test of tie k with those after it, whose ends move by its columns from the given one on, and joins those that
// are hardly told apart.
func (c *comparison) compare(k, column int) {
	one := &c.all[k]
	h := one.unload()
	for l := k + 1; l < len(c.all); l++ {
		two := &c.all[l]
		if one.t.Set > 0 && one.t.Set == two.t.Set {
			continue // known from the graph
		}
		if x := c.correlation(one, two, h, column); x > inseparable {
			c.join(k, l, x)
		}
	}
}

// unload returns the matrix that makes Q J' f of what load made: Q J' Omega times the detectable errors.
func (s *shadow) unload() []float64 {
	h := slices.Clone(s.h)
	for c, x := range s.t.Detectable {
		if !math.IsNaN(float64(x)) {
			for i := range s.dof {
				h[c*s.dof+i] /= float64(x)
			}
		}
	}
	return h
}

// correlation of the test of one tie with that of another, given what unload returned for the first and its first column.
func (c *comparison) correlation(one, two *shadow, h []float64, column int) float64 {
	var seen [6]float64
	var cov [36]float64
	n, dof := len(one.t.Detectable), one.dof
	for e, slot := range two.at {
		row := c.ends[int(slot)*c.wide*sparse.Together+column:]
		for a := range two.wide[e] {
			clear(seen[:dof])
			for p, x := range row[a*sparse.Together : a*sparse.Together+n] {
				for i, y := range h[p*dof : p*dof+dof] {
					seen[i] += x * y
				}
			}
			for r, f := range two.k[e][a*two.dof : a*two.dof+two.dof] {
				into := cov[r*dof : r*dof+dof]
				for i := range into {
					into[i] += f * seen[i]
				}
			}
		}
	}
	return reliability.Correlation(cov[:two.dof*dof], two.dof, dof)
}

// join joins the sets of two.
func (c *comparison) join(a, b int, correlation float64) {
	ra, rb := c.g.root(int32(a)), c.g.root(int32(b))
	if ra == rb {
		return
	}
	least := correlation
	for _, r := range [2]int32{ra, rb} {
		if x, known := c.least[r]; known {
			least = min(least, x)
		}
		delete(c.least, r)
	}
	c.g.join(ra, rb)
	c.least[c.g.root(ra)] = least
}

// list lists them in the order of the survey; what the graph alone cannot tell apart joins as one.
func (c *comparison) list(w *work) {
	first := map[int]int{} // exact set -> job
	for i := range c.all {
		t := c.all[i].t
		if t.Set == 0 {
			continue
		}
		if f, seen := first[t.Set]; !seen {
			first[t.Set] = i
		} else if c.g.root(int32(f)) != c.g.root(int32(i)) {
			c.join(f, i, 1)
		}
	}
	members := map[int32][]int{}
	exact := map[int32]map[int]bool{}
	var roots []int32
	order := make(map[*Tie]int, len(c.all))
	for i := range c.all {
		order[c.all[i].t] = i
	}
	for k := range w.out.Ties {
		i, tested := order[&w.out.Ties[k]]
		if !tested {
			continue
		}
		r := c.g.root(int32(i))
		if len(members[r]) == 0 {
			roots = append(roots, r)
			exact[r] = map[int]bool{}
		}
		members[r] = append(members[r], k)
		exact[r][w.out.Ties[k].Set] = true
	}
	for _, r := range roots {
		if len(members[r]) < 2 || len(exact[r]) == 1 && !exact[r][0] { // one set of the graph is told there
			continue
		}
		n := Near{Correlation: min(1, c.least[r])}
		for _, k := range members[r] {
			n.Ties = append(n.Ties, w.out.Ties[k].ID)
		}
		w.out.Near = append(w.out.Near, n)
	}
}
