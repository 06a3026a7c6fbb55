package scenarios

import (
	"container/heap"
	"math"
	"math/rand/v2"
)

// site is a place as a graph: nodes where corridors meet, edges along their centre lines.
type site struct {
	nodes    [][3]float64
	edges    []corridor
	at       [][]int // edges of each node
	entrance int     // node at which the base stands and the first robot starts
	open     bool    // no walls: whatever is near is in sight
	shift    float64 // distance along x after which the site looks the same; 0 where it does not
	index    grid    // of points
	points   []sitePoint
}

// corridor is an edge: the centre line from node a to node b with a point about each metre, and half its width.
type corridor struct {
	a, b   int
	line   [][3]float64
	length float64
	half   float64
}

// sitePoint is a point of a centre line.
type sitePoint struct {
	p    [3]float64
	half float64
}

// newSite lays out the site of a scenario.
func newSite(sc *Scenario, seed uint64) *site {
	rng := stream(seed, "site")
	var s *site
	switch sc.Site.Kind {
	case "mine":
		s = newMine(sc, rng)
	case "store":
		s = newStore(sc, rng)
	default:
		s = newWood(sc, rng)
	}
	s.finish()
	return s
}

func (s *site) node(p [3]float64) int {
	s.nodes = append(s.nodes, p)
	return len(s.nodes) - 1
}

// connect adds a corridor from node a to node b along a line whose ends are those nodes.
func (s *site) connect(a, b int, line [][3]float64, half float64) {
	length := 0.0
	for i := 1; i < len(line); i++ {
		length += distance(line[i-1], line[i])
	}
	s.edges = append(s.edges, corridor{a, b, line, length, half})
}

// finish builds what is derived from nodes and edges.
func (s *site) finish() {
	s.at = make([][]int, len(s.nodes))
	var box box
	for i := range s.edges {
		e := &s.edges[i]
		s.at[e.a] = append(s.at[e.a], i)
		s.at[e.b] = append(s.at[e.b], i)
		for _, p := range e.line {
			s.points = append(s.points, sitePoint{p, e.half})
			box.extend(p)
		}
	}
	s.index = newGrid(box, 4)
	for i := range s.points {
		s.index.add(s.points[i].p, i)
	}
}

// clearance returns how far p lies inside the walls of the widest corridor around it; negative when it lies in the rock.
func (s *site) clearance(p [3]float64) float64 {
	best := math.Inf(-1)
	for _, cell := range s.index.around(p) {
		for _, i := range cell {
			q := &s.points[i]
			// Centre lines have a point each metre: at most half a metre of the distance lies along the line.
			d := max(0, distance(p, q.p)-0.25/max(2*q.half, 0.5))
			best = max(best, q.half-d)
		}
	}
	return best
}

// sees reports whether the straight line from p to q stays inside the walls.
func (s *site) sees(p, q [3]float64) bool {
	if s.open {
		return true
	}
	n := int(distance(p, q)/0.75) + 1
	for i := 1; i < n; i++ {
		if s.clearance(between(p, q, float64(i)/float64(n))) < 0 {
			return false
		}
	}
	return true
}

// middle returns the node nearest to the middle of the first n nodes.
func (s *site) middle(n int) (node int) {
	var mean [3]float64
	for _, p := range s.nodes[:n] {
		for c := range mean {
			mean[c] += p[c] / float64(n)
		}
	}
	for i, p := range s.nodes[:n] {
		if distance(p, mean) < distance(s.nodes[node], mean) {
			node = i
		}
	}
	return node
}

// straight returns a line from p to q with a point about each metre, pushed sideways by up to amp metres.
func straight(rng *rand.Rand, p, q [3]float64, amp, wavelength float64) [][3]float64 {
	dx, dy := q[0]-p[0], q[1]-p[1]
	flat := math.Hypot(dx, dy)
	n := max(1, int(math.Round(distance(p, q))))
	line := make([][3]float64, n+1)
	r := newRipple(rng, wavelength)
	for i := range line {
		t := float64(i) / float64(n)
		line[i] = between(p, q, t)
		if amp > 0 && flat > 0 && i > 0 && i < n {
			o := amp * math.Sin(math.Pi*t) * r.at(t*flat)
			line[i][0] -= o * dy / flat
			line[i][1] += o * dx / flat
		}
	}
	return line
}

// thin drops edges drawn with the given probability, as long as the rest stays connected. Edges are given as node pairs.
func thin(rng *rand.Rand, nodes int, pairs [][2]int, share float64) (kept [][2]int) {
	root := make([]int, nodes)
	for i := range root {
		root[i] = i
	}
	find := func(i int) int {
		for root[i] != i {
			root[i] = root[root[i]]
			i = root[i]
		}
		return i
	}
	keep := make([]bool, len(pairs))
	for _, k := range rng.Perm(len(pairs)) { // a random spanning tree stays whatever is drawn
		a, b := find(pairs[k][0]), find(pairs[k][1])
		if draw := rng.Float64(); a == b {
			keep[k] = draw >= share
			continue
		}
		root[a] = b
		keep[k] = true
	}
	for k, p := range pairs {
		if keep[k] {
			kept = append(kept, p)
		}
	}
	return kept
}

// routes holds shortest paths from one node.
type routes struct {
	cost []float64
	via  []int // edge that leads to each node; -1 at the start
}

// routesFrom computes shortest paths from a node (Dijkstra 1959) with the given cost of each edge.
func (s *site) routesFrom(start int, cost func(edge int) float64) routes {
	r := routes{make([]float64, len(s.nodes)), make([]int, len(s.nodes))}
	for i := range r.cost {
		r.cost[i], r.via[i] = math.Inf(1), -1
	}
	r.cost[start] = 0
	q := frontier{{start, 0}}
	for len(q) > 0 {
		f := heap.Pop(&q).(reached)
		if f.cost > r.cost[f.node] {
			continue
		}
		for _, k := range s.at[f.node] {
			next := s.edges[k].other(f.node)
			if c := f.cost + cost(k); c < r.cost[next] {
				r.cost[next], r.via[next] = c, k
				heap.Push(&q, reached{next, c})
			}
		}
	}
	return r
}

func (c *corridor) other(node int) int {
	if node == c.a {
		return c.b
	}
	return c.a
}

type reached struct {
	node int
	cost float64
}

type frontier []reached

func (f frontier) Len() int { return len(f) }
func (f frontier) Less(i, j int) bool {
	return f[i].cost < f[j].cost || f[i].cost == f[j].cost && f[i].node < f[j].node
}
func (f frontier) Swap(i, j int) { f[i], f[j] = f[j], f[i] }
func (f *frontier) Push(x any)   { *f = append(*f, x.(reached)) }
func (f *frontier) Pop() any {
	old := *f
	x := old[len(old)-1]
	*f = old[:len(old)-1]
	return x
}

func distance(p, q [3]float64) float64 {
	x, y, z := p[0]-q[0], p[1]-q[1], p[2]-q[2]
	return math.Sqrt(x*x + y*y + z*z)
}

// between returns the point at share t of the way from p to q.
func between(p, q [3]float64, t float64) [3]float64 {
	return [3]float64{p[0] + t*(q[0]-p[0]), p[1] + t*(q[1]-p[1]), p[2] + t*(q[2]-p[2])}
}
