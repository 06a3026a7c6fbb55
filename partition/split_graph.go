package partition

// splitGraph is one level of the multilevel scheme: an undirected graph whose
// vertices are connected groups of poses, and the neighbourhood nets that make
// the number of boundary poses exact on every level.
//
// Each pose owns one net, made of itself and its neighbours; the pose is a
// boundary pose exactly when its net has a member in another piece (the
// net-cut model of Catalyurek and Aykanat, IEEE Trans. Parallel and
// Distributed Systems 10(7), 1999). Contraction keeps the nets: members that
// fall together are merged, nets that fall inside one vertex vanish, equal
// nets of one vertex become one net with the sum of their weights.
type splitGraph struct {
	n      int
	weight []int32 // poses in each vertex

	start []int32 // adjacency of v: adj[start[v]:start[v+1]]
	adj   []int32
	mult  []int32 // measurements behind each entry of adj

	netStart  []int32 // nets owned by v: netStart[v] up to netStart[v+1]
	owner     []int32 // owner of each net
	netWeight []int32 // poses behind each net
	pinStart  []int32 // members of net e other than its owner: pins[pinStart[e]:pinStart[e+1]]
	pins      []int32
	incStart  []int32 // nets of which v is a member but not the owner: inc[incStart[v]:incStart[v+1]]
	inc       []int32

	maxWeight int32 // largest entry of weight
}

// newSplitGraph builds the finest level: one vertex a pose, repeated edges
// merged with their number, self loops dropped.
func newSplitGraph(n int, edges [][2]int32) *splitGraph {
	deg := make([]int32, n+1)
	for _, e := range edges {
		if e[0] != e[1] {
			deg[e[0]+1]++
			deg[e[1]+1]++
		}
	}
	for v := range n {
		deg[v+1] += deg[v]
	}
	raw := make([]int32, deg[n])
	fill := append([]int32(nil), deg[:n]...)
	for _, e := range edges {
		if a, b := e[0], e[1]; a != b {
			raw[fill[a]] = b
			raw[fill[b]] = a
			fill[a]++
			fill[b]++
		}
	}
	g := &splitGraph{
		n:         n,
		weight:    make([]int32, n),
		start:     make([]int32, n+1),
		adj:       make([]int32, 0, len(raw)),
		mult:      make([]int32, 0, len(raw)),
		netStart:  make([]int32, n+1),
		owner:     make([]int32, n),
		netWeight: make([]int32, n),
		maxWeight: 1,
	}
	at := make([]int32, n) // 1 + position of the neighbour in adj
	for v := range int32(n) {
		first := int32(len(g.adj))
		for _, u := range raw[deg[v]:deg[v+1]] {
			if at[u] > first {
				g.mult[at[u]-1]++
				continue
			}
			g.adj = append(g.adj, u)
			g.mult = append(g.mult, 1)
			at[u] = int32(len(g.adj))
		}
		g.start[v+1] = int32(len(g.adj))
		g.weight[v], g.owner[v], g.netWeight[v], g.netStart[v+1] = 1, v, 1, v+1
	}
	// Net v is the neighbourhood of v, and v is a member of its neighbours' nets.
	g.pinStart, g.pins = g.start, g.adj
	g.incStart, g.inc = g.start, g.adj
	return g
}

// contract merges the vertices with equal cluster number, 0 up to nc.
func (g *splitGraph) contract(cluster []int32, nc int) *splitGraph {
	c := &splitGraph{
		n:        nc,
		weight:   make([]int32, nc),
		start:    make([]int32, nc+1),
		adj:      make([]int32, 0, len(g.adj)),
		mult:     make([]int32, 0, len(g.adj)),
		netStart: make([]int32, nc+1),
		pinStart: make([]int32, 1, len(g.owner)+1),
		pins:     make([]int32, 0, len(g.pins)),
		incStart: make([]int32, nc+1),
	}
	first, members := splitBuckets(cluster, nc)
	at := make([]int32, nc)   // 1 + position in c.adj
	seen := make([]int32, nc) // last net that met the vertex
	serial := int32(0)
	var hash []uint64 // of the pins of each net of c
	for v := range int32(nc) {
		begin := int32(len(c.adj))
		ownBegin := len(c.owner)
		for _, m := range members[first[v]:first[v+1]] {
			c.weight[v] += g.weight[m]
			for i := g.start[m]; i < g.start[m+1]; i++ {
				u := cluster[g.adj[i]]
				switch {
				case u == v:
				case at[u] > begin:
					c.mult[at[u]-1] += g.mult[i]
				default:
					c.adj = append(c.adj, u)
					c.mult = append(c.mult, g.mult[i])
					at[u] = int32(len(c.adj))
				}
			}
			for e := g.netStart[m]; e < g.netStart[m+1]; e++ {
				serial++
				pinBegin := len(c.pins)
				h := uint64(0)
				for _, p := range g.pins[g.pinStart[e]:g.pinStart[e+1]] {
					if u := cluster[p]; u != v && seen[u] != serial {
						seen[u] = serial
						c.pins = append(c.pins, u)
						x := uint64(u)*0x9e3779b97f4a7c15 + 1
						h += x ^ x>>29
					}
				}
				if len(c.pins) == pinBegin {
					continue
				}
				if twin := c.findNet(ownBegin, hash, h, len(c.pins)-pinBegin, seen, serial); twin >= 0 {
					c.netWeight[twin] += g.netWeight[e]
					c.pins = c.pins[:pinBegin]
					continue
				}
				hash = append(hash, h)
				c.owner = append(c.owner, v)
				c.netWeight = append(c.netWeight, g.netWeight[e])
				c.pinStart = append(c.pinStart, int32(len(c.pins)))
			}
		}
		c.start[v+1] = int32(len(c.adj))
		c.netStart[v+1] = int32(len(c.owner))
		c.maxWeight = max(c.maxWeight, c.weight[v])
	}
	for _, p := range c.pins {
		c.incStart[p+1]++
	}
	for v := range nc {
		c.incStart[v+1] += c.incStart[v]
	}
	c.inc = make([]int32, len(c.pins))
	fill := append([]int32(nil), c.incStart[:nc]...)
	for e := range c.owner {
		for _, p := range c.pins[c.pinStart[e]:c.pinStart[e+1]] {
			c.inc[fill[p]] = int32(e)
			fill[p]++
		}
	}
	return c
}

// findNet returns the net numbered begin or later whose pins are those with
// seen == serial, size in number, or -1.
func (g *splitGraph) findNet(begin int, hash []uint64, h uint64, size int, seen []int32, serial int32) int {
search:
	for e := begin; e < len(g.owner); e++ {
		if hash[e] != h || int(g.pinStart[e+1]-g.pinStart[e]) != size {
			continue
		}
		for _, p := range g.pins[g.pinStart[e]:g.pinStart[e+1]] {
			if seen[p] != serial {
				continue search
			}
		}
		return e
	}
	return -1
}

// splitBuckets sorts the vertices by label, 0 up to count: those with label l
// are members[first[l]:first[l+1]], in rising order.
func splitBuckets(label []int32, count int) (first, members []int32) {
	first = make([]int32, count+1)
	for _, l := range label {
		first[l+1]++
	}
	for l := range count {
		first[l+1] += first[l]
	}
	members = make([]int32, len(label))
	fill := append([]int32(nil), first[:count]...)
	for v, l := range label {
		members[fill[l]] = int32(v)
		fill[l]++
	}
	return first, members
}

// components returns the sizes of the connected components.
func (g *splitGraph) components() (sizes []int) {
	seen := make([]bool, g.n)
	stack := make([]int32, 0, g.n)
	for v := range int32(g.n) {
		if seen[v] {
			continue
		}
		seen[v] = true
		stack = append(stack[:0], v)
		size := 0
		for len(stack) > 0 {
			u := stack[len(stack)-1]
			stack = stack[:len(stack)-1]
			size++
			for _, w := range g.adj[g.start[u]:g.start[u+1]] {
				if !seen[w] {
					seen[w] = true
					stack = append(stack, w)
				}
			}
		}
		sizes = append(sizes, size)
	}
	return sizes
}
