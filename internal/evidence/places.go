package evidence

// meetings is the net of units and the places where they meet. Ties of several pairs may rest on one and the same place: where
// one place looks like another, every robot that comes by makes the same error. Between two parts of the fleet such a place
// counts once, however many pairs of units it ties together, so what binds the parts is not a sum over pairs.
//
// Each place is a pair of vertices with one arc of capacity 1; the least number of places that part two units is a maximum
// flow (Ford, Fulkerson, "Maximal flow through a network", Canadian J. Math. 8, 1956).
type meetings struct {
	units int
	arcs  []arc
	first [][]int // per vertex: its arcs; arc k^1 leads back along arc k
	left  []int   // per arc, in a search
	from  []int   // per vertex, in a search: the arc it was reached by
	queue []int
}

type arc struct{ to, capacity int }

const unbounded = 1 << 30

// meet gathers the places that the satisfied hypotheses of c rest on. Two places within o.PlaceM of each other in c are one.
func (f *fleet) meet(c *config) *meetings {
	m := &meetings{units: f.n, first: make([][]int, f.n)}
	type place struct {
		at     [3]float64
		comp   int
		vertex int
		units  []bool
	}
	var ps []place
	for k := range f.hs {
		h := &f.hs[k]
		if !c.holds[k] || h.weight == 0 {
			continue
		}
		for _, t := range h.spots {
			l := &f.b.links[t]
			p := c.at[h.a].Apply(f.b.tracks[h.a].Poses[l.i].T)
			at := -1
			for i := range ps {
				if ps[i].comp == c.comp[h.a] && !far(&ps[i].at, &p, f.b.o.PlaceM) {
					at = i
					break
				}
			}
			if at < 0 {
				at = len(ps)
				v := len(m.first)
				m.first = append(m.first, nil, nil)
				m.join(v, v+1, 1)
				ps = append(ps, place{p, c.comp[h.a], v, make([]bool, f.n)})
			}
			for _, u := range [2]int{h.a, h.b} {
				if !ps[at].units[u] {
					ps[at].units[u] = true
					m.join(u, ps[at].vertex, unbounded)
					m.join(ps[at].vertex+1, u, unbounded)
				}
			}
		}
	}
	m.left, m.from = make([]int, len(m.arcs)), make([]int, len(m.first))
	return m
}

func (m *meetings) join(u, v, capacity int) {
	m.first[u] = append(m.first[u], len(m.arcs))
	m.first[v] = append(m.first[v], len(m.arcs)+1)
	m.arcs = append(m.arcs, arc{v, capacity}, arc{u, 0})
}

// between returns how many places bind units a and b to each other, not more than limit.
func (m *meetings) between(a, b, limit int) int {
	for k := range m.arcs {
		m.left[k] = m.arcs[k].capacity
	}
	for n := 0; n < limit; n++ {
		for v := range m.from {
			m.from[v] = -1
		}
		m.queue = append(m.queue[:0], a)
		for k := 0; k < len(m.queue) && m.from[b] < 0; k++ {
			for _, x := range m.first[m.queue[k]] {
				if v := m.arcs[x].to; m.left[x] > 0 && m.from[v] < 0 && v != a {
					m.from[v] = x
					m.queue = append(m.queue, v)
				}
			}
		}
		if m.from[b] < 0 {
			return n
		}
		for v := b; v != a; { // every way leads through a place, so it carries 1
			x := m.from[v]
			m.left[x]--
			m.left[x^1]++
			v = m.arcs[x^1].to
		}
	}
	return limit
}
