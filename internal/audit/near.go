package audit

import (
	"math"
	"slices"

	"selvage/internal/reliability"
)

// Near is a set of ties that a test can hardly tell apart: each is joined to another of the set by tests of a correlation above
// [inseparable].
type Near struct {
	Ties        []string `json:"ties"`
	Correlation float64  `json:"correlation"` // the least by which one is joined to the set
}

// inseparable is the correlation of two tests from which on an error in one measurement is likely taken for one in the other.
const inseparable = 0.99

// shadow is what the correlation of the test of a tie with others takes.
type shadow struct {
	t    *Tie
	dof  int
	h    []float64    // see [reliability.Parts]: for the tie that vectors belong to
	at   [2]int       // offsets of its ends, -1 for one that is fixed
	k    [2][]float64 // J' f of each end, width x dof: for the others
	wide [2]int
}

// shadows makes them for the ties that are tested.
func (w *work) shadows(jobs []*Tie) []shadow {
	all := make([]shadow, len(jobs))
	for i, t := range jobs {
		s := &all[i]
		s.t = t
		var f []float64
		f, s.h, s.dof = reliability.Parts(w.info(t.m), w.predicted(t.m))
		d := w.derivative(t.m)
		for e, j := range d.by {
			s.at[e] = w.sigma.Offset(d.at[e])
			width := len(j) / d.rows
			s.wide[e] = width
			s.k[e] = make([]float64, width*s.dof)
			for r := range d.rows {
				for a := range width {
					for c := range s.dof {
						s.k[e][a*s.dof+c] += j[r*width+a] * f[r*s.dof+c]
					}
				}
			}
		}
	}
	return all
}

// nearBy correlates the test of tie k with those after it, given the vectors that load made of it, and notes those that are hardly told
// apart.
func (w *work) nearBy(all []shadow, k int, vectors []float64, scalars int, note func(a, b int, correlation float64)) {
	h := all[k].unload()
	for l := k + 1; l < len(all); l++ {
		if all[k].t.Set > 0 && all[k].t.Set == all[l].t.Set {
			continue // known from the graph
		}
		if c := all[k].correlation(&all[l], h, vectors, scalars); c > inseparable {
			note(k, l, c)
		}
	}
}

// unload returns the matrix that makes Q J' f of the vectors that load made: Q J' Omega times the detectable errors.
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

// correlation of the test of a tie with that of another, given the vectors of the first and what unload returned for it.
func (s *shadow) correlation(other *shadow, h, vectors []float64, scalars int) float64 {
	var seen, cov [36]float64
	n := len(s.t.Detectable)
	for e, o := range other.at {
		if o < 0 {
			continue
		}
		for a := range other.wide[e] {
			clear(seen[:s.dof])
			for c := range n {
				x := vectors[c*scalars+o+a]
				for i := range s.dof {
					seen[i] += x * h[c*s.dof+i]
				}
			}
			for r := range other.dof {
				f := other.k[e][a*other.dof+r]
				for i := range s.dof {
					cov[r*s.dof+i] += f * seen[i]
				}
			}
		}
	}
	return reliability.Correlation(cov[:other.dof*s.dof], other.dof, s.dof)
}

// nearSets joins what is hardly told apart to sets.
type nearSets struct {
	g     groups
	least map[int32]float64 // root -> correlation
}

func (s *nearSets) join(a, b int, correlation float64) {
	ra, rb := s.g.root(int32(a)), s.g.root(int32(b))
	if ra == rb {
		return
	}
	least := correlation
	for _, r := range [2]int32{ra, rb} {
		if x, known := s.least[r]; known {
			least = min(least, x)
		}
		delete(s.least, r)
	}
	s.g.join(ra, rb)
	s.least[s.g.root(ra)] = least
}

// sets lists them in the order of the survey; what the graph alone cannot tell apart joins as one.
func (s *nearSets) list(w *work, jobs []*Tie) {
	first := map[int]int{} // exact set -> job
	for i, t := range jobs {
		if t.Set == 0 {
			continue
		}
		if f, seen := first[t.Set]; !seen {
			first[t.Set] = i
		} else if s.g.root(int32(f)) != s.g.root(int32(i)) {
			s.join(f, i, 1)
		}
	}
	members := map[int32][]int{}
	exact := map[int32]map[int]bool{}
	var roots []int32
	order := make(map[*Tie]int, len(jobs))
	for i, t := range jobs {
		order[t] = i
	}
	for k := range w.out.Ties {
		i, tested := order[&w.out.Ties[k]]
		if !tested {
			continue
		}
		r := s.g.root(int32(i))
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
		n := Near{Correlation: min(1, s.least[r])}
		for _, k := range members[r] {
			n.Ties = append(n.Ties, w.out.Ties[k].ID)
		}
		w.out.Near = append(w.out.Near, n)
	}
}
