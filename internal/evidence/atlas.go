package evidence

import (
	"math"
	"slices"
)

// tieCost is what crossing a tie costs in the search for a short walk, in metres travelled.
const tieCost = 2

// atlas finds short walks from unit to unit over a set of ties. Its vertices are the nodes these ties touch; neighbours along a
// track are joined.
type atlas struct {
	b     *body
	first []int // per unit: its first vertex; one more at the end
	node  []int // per vertex
	unit  []int
	doors [][]door // per vertex
	dist  []float64
	via   []int // tie crossed to reach the vertex, -1 along the track, -2 from the start
	prev  []int
	heap  []entry
	seen  []int // stamp of the search that reached a vertex
	stamp int
}

// door is a tie and the vertex behind it.
type door struct{ tie, to int }

type entry struct {
	cost float64
	v    int
}

func newAtlas(b *body, ties []int) *atlas {
	a := &atlas{b: b, first: make([]int, len(b.tracks)+1)}
	nodes := make([][]int, len(b.tracks))
	for _, t := range ties {
		l := &b.links[t]
		nodes[l.a] = append(nodes[l.a], l.i)
		nodes[l.b] = append(nodes[l.b], l.j)
	}
	for u := range nodes {
		slices.Sort(nodes[u])
		nodes[u] = slices.Compact(nodes[u])
		a.first[u+1] = a.first[u] + len(nodes[u])
		a.node = append(a.node, nodes[u]...)
		for range nodes[u] {
			a.unit = append(a.unit, u)
		}
	}
	n := len(a.node)
	a.doors = make([][]door, n)
	a.dist, a.via, a.prev, a.seen = make([]float64, n), make([]int, n), make([]int, n), make([]int, n)
	for _, t := range ties {
		l := &b.links[t]
		p, q := a.find(l.a, l.i), a.find(l.b, l.j)
		a.doors[p] = append(a.doors[p], door{t, q})
		a.doors[q] = append(a.doors[q], door{t, p})
	}
	return a
}

// find returns the first vertex of unit u at or after node i, which may be that of the next unit's start.
func (a *atlas) find(u, i int) int {
	k, _ := slices.BinarySearch(a.node[a.first[u]:a.first[u+1]], i)
	return a.first[u] + k
}

// walk returns the ties of a short walk between the ends of l that crosses no tie for which avoid is true, and whether there
// is one (Dijkstra, "A note on two problems in connexion with graphs", 1959, over metres travelled).
func (a *atlas) walk(l *link, avoid func(t int) bool) ([]int, bool) {
	a.stamp++
	a.heap = a.heap[:0]
	travel := a.b.tracks[l.a].TravelM
	k := a.find(l.a, l.i)
	for _, v := range [2]int{k - 1, k} {
		if v >= a.first[l.a] && v < a.first[l.a+1] {
			a.reach(v, math.Abs(travel[a.node[v]]-travel[l.i]), -2, -1)
		}
	}
	best, end := math.Inf(1), -1
	goal := a.b.tracks[l.b].TravelM
	for len(a.heap) > 0 {
		e := a.pop()
		if e.cost >= best {
			break
		}
		if e.cost > a.dist[e.v] {
			continue
		}
		u := a.unit[e.v]
		if u == l.b {
			if c := e.cost + math.Abs(goal[a.node[e.v]]-goal[l.j]); c < best {
				best, end = c, e.v
			}
		}
		x := a.b.tracks[u].TravelM
		for _, v := range [2]int{e.v - 1, e.v + 1} {
			if v >= a.first[u] && v < a.first[u+1] {
				a.reach(v, e.cost+math.Abs(x[a.node[v]]-x[a.node[e.v]]), -1, e.v)
			}
		}
		for _, d := range a.doors[e.v] {
			if !avoid(d.tie) {
				a.reach(d.to, e.cost+tieCost, d.tie, e.v)
			}
		}
	}
	if end < 0 {
		return nil, false
	}
	var ties []int
	for v := end; v >= 0; v = a.prev[v] {
		if a.via[v] >= 0 {
			ties = append(ties, a.via[v])
		}
	}
	slices.Reverse(ties)
	return ties, true
}

// through composes the walk from node i of l's first unit to node j of its second over the ties given.
func (b *body) through(l *link, ties []int) path {
	var p path
	unit, node := l.a, l.i
	p.x, p.c = b.tracks[unit].leg(node, node)
	for _, t := range ties {
		m := &b.links[t]
		near, far := m.i, m.j
		z, c, next := m.z, m.c, m.b
		if unit == m.b {
			near, far, next = m.j, m.i, m.a
			z = m.z.Inv()
			c = m.c.carry(&z)
		}
		y, d := b.tracks[unit].leg(node, near)
		p.extend(&y, &d)
		p.extend(&z, &c)
		unit, node = next, far
	}
	y, d := b.tracks[unit].leg(node, l.j)
	p.extend(&y, &d)
	return p
}

func (a *atlas) reach(v int, cost float64, via, prev int) {
	if a.seen[v] == a.stamp && a.dist[v] <= cost {
		return
	}
	a.seen[v], a.dist[v], a.via[v], a.prev[v] = a.stamp, cost, via, prev
	a.heap = push(a.heap, entry{cost, v})
}

func (a *atlas) pop() (e entry) {
	e, a.heap = pop(a.heap)
	return e
}

// push and pop keep the entry of least cost at the front.
func push(h []entry, e entry) []entry {
	h = append(h, e)
	k := len(h) - 1
	for k > 0 && h[(k-1)/2].cost > h[k].cost {
		h[k], h[(k-1)/2] = h[(k-1)/2], h[k]
		k = (k - 1) / 2
	}
	return h
}

func pop(h []entry) (entry, []entry) {
	top := h[0]
	n := len(h) - 1
	h[0] = h[n]
	h = h[:n]
	for k := 0; ; {
		c := 2*k + 1
		if c >= n {
			break
		}
		if c+1 < n && h[c+1].cost < h[c].cost {
			c++
		}
		if h[k].cost <= h[c].cost {
			break
		}
		h[k], h[c] = h[c], h[k]
		k = c
	}
	return top, h
}
