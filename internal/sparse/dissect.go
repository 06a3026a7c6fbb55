package sparse

import "math/rand/v2"

// Parts of at most this many vertices are ordered by minimum degree.
const leafSize = 100

// nestedDissection returns an elimination order of the vertices outside halo: the
// graph is cut by small vertex separators, again and again, and each separator
// comes after the parts it separates (George, 1973). The leaves are ordered by
// minimum degree with their neighbours outside as halo.
func nestedDissection(g *graph, halo []bool) []int32 {
	d := &dissection{
		g: g, rng: rand.New(rand.NewPCG(0x5eed, uint64(g.order()))),
		local: make([]int32, g.order()),
	}
	free := make([]int32, 0, g.order())
	for i, h := range halo {
		d.local[i] = -1
		if !h {
			free = append(free, int32(i))
		}
	}
	d.order = make([]int32, 0, len(free))
	d.part(free)
	return d.order
}

type dissection struct {
	g     *graph
	rng   *rand.Rand
	order []int32
	local []int32 // vertex -> its number in the subgraph being built, or -1
}

func (d *dissection) part(vertices []int32) {
	if len(vertices) <= leafSize {
		d.leaf(vertices)
		return
	}
	var parts [3][]int32
	for i, s := range bisect(d.induced(vertices), d.rng) {
		parts[s] = append(parts[s], vertices[i])
	}
	if len(parts[0]) == 0 || len(parts[1]) == 0 { // nothing to cut
		d.leaf(vertices)
		return
	}
	d.part(parts[0])
	d.part(parts[1])
	d.order = append(d.order, parts[2]...)
}

// induced returns the subgraph of the given vertices, with edges of weight one.
func (d *dissection) induced(vertices []int32) *level {
	size := 0
	for i, v := range vertices {
		d.local[v] = int32(i)
		size += len(d.g.neighbours(v))
	}
	n := len(vertices)
	l := &level{graph: graph{ptr: make([]int32, n+1), adj: make([]int32, 0, size), weight: make([]int32, n)}}
	for i, v := range vertices {
		l.weight[i] = d.g.weight[v]
		l.total += l.weight[i]
		for _, u := range d.g.neighbours(v) {
			if k := d.local[u]; k >= 0 {
				l.adj = append(l.adj, k)
			}
		}
		l.ptr[i+1] = int32(len(l.adj))
	}
	l.edge = make([]int32, len(l.adj))
	for i := range l.edge {
		l.edge[i] = 1
	}
	for _, v := range vertices {
		d.local[v] = -1
	}
	return l
}

// leaf appends the given vertices in minimum degree order. Their neighbours outside
// count in the degrees.
func (d *dissection) leaf(vertices []int32) {
	names := append([]int32(nil), vertices...)
	for i, v := range vertices {
		d.local[v] = int32(i)
	}
	var edges [][2]int32
	for i, v := range vertices {
		for _, u := range d.g.neighbours(v) {
			k := d.local[u]
			if k < 0 {
				k = int32(len(names))
				d.local[u] = k
				names = append(names, u)
			}
			if k > int32(i) {
				edges = append(edges, [2]int32{int32(i), k})
			}
		}
	}
	g := &graph{ptr: make([]int32, len(names)+1), adj: make([]int32, 2*len(edges)), weight: make([]int32, len(names))}
	halo := make([]bool, len(names))
	for i, v := range names {
		g.weight[i] = d.g.weight[v]
		halo[i] = i >= len(vertices)
		d.local[v] = -1
	}
	g.fill(edges)
	for _, i := range minimumDegree(g, halo, false) {
		d.order = append(d.order, names[i])
	}
}
