package evidence

import (
	"math"
	"slices"
)

// network finds short ways along a track and through the closures of it that are open to walkers.
type network struct {
	c     *Chain
	links []link
	node  []int    // keyframes at which closures end, ascending
	ends  [][2]int // of each closure, as positions in node
	doors [][]int  // closures open at each node

	stamp uint32
	seen  []uint32
	dist  []float64
	via   []int // closure crossed on arrival, -1: along the track
	prev  []int
	heap  []entry
}

func newNetwork(c *Chain, links []link) network {
	n := network{c: c, links: links, ends: make([][2]int, len(links))}
	for k := range links {
		n.node = append(n.node, links[k].i, links[k].j)
	}
	slices.Sort(n.node)
	n.node = slices.Compact(n.node)
	for k := range links {
		n.ends[k][0], _ = slices.BinarySearch(n.node, links[k].i)
		n.ends[k][1], _ = slices.BinarySearch(n.node, links[k].j)
	}
	m := len(n.node)
	n.doors = make([][]int, m)
	n.seen, n.dist, n.via, n.prev = make([]uint32, m), make([]float64, m), make([]int, m), make([]int, m)
	return n
}

// open lets walkers through closure t.
func (n *network) open(t int) {
	for _, v := range n.ends[t] {
		n.doors[v] = append(n.doors[v], t)
	}
}

// shut closes closure t.
func (n *network) shut(t int) {
	for _, v := range n.ends[t] {
		n.doors[v] = slices.DeleteFunc(n.doors[v], func(x int) bool { return x == t })
	}
}

// walk returns the shortest way between the ends of closure t that does not cross t (Dijkstra, "A note on two problems in connexion
// with graphs", 1959, over metres travelled; crossing a closure counts as tieCost metres), and whether there is one.
func (n *network) walk(t int) (w way, ok bool) {
	from, to := n.ends[t][0], n.ends[t][1]
	n.stamp++
	n.heap = n.heap[:0]
	n.reach(from, 0, -1, -1)
	for len(n.heap) > 0 {
		e := n.pop()
		if e.cost > n.dist[e.v] {
			continue
		}
		if e.v == to {
			return n.compose(to), true
		}
		for _, v := range [2]int{e.v - 1, e.v + 1} {
			if v >= 0 && v < len(n.node) && n.c.joined(n.node[v], n.node[e.v]) {
				n.reach(v, e.cost+math.Abs(n.c.travel[n.node[v]]-n.c.travel[n.node[e.v]]), -1, e.v)
			}
		}
		for _, d := range n.doors[e.v] {
			if d != t {
				n.reach(n.ends[d][0]+n.ends[d][1]-e.v, e.cost+tieCost, d, e.v)
			}
		}
	}
	return way{}, false
}

// compose returns the way found to a node.
func (n *network) compose(to int) way {
	var nodes []int
	for v := to; v >= 0; v = n.prev[v] {
		nodes = append(nodes, v)
	}
	slices.Reverse(nodes)
	w := start()
	last := nodes[0] // where the present stretch along the track began
	for k, v := range nodes[1:] {
		if d := n.via[v]; d >= 0 {
			w.along(n.c, n.node[last], n.node[nodes[k]])
			w.across(&n.links[d], v == n.ends[d][0])
			last = v
		}
	}
	w.along(n.c, n.node[last], n.node[to])
	return w
}

func (n *network) reach(v int, cost float64, via, prev int) {
	if n.seen[v] == n.stamp && n.dist[v] <= cost {
		return
	}
	n.seen[v], n.dist[v], n.via[v], n.prev[v] = n.stamp, cost, via, prev
	n.heap = push(n.heap, entry{cost, v})
}

func (n *network) pop() (e entry) {
	e, n.heap = pop(n.heap)
	return e
}
