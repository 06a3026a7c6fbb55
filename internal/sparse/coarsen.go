package sparse

import "math/rand/v2"

// Coarsening stops at about this many vertices.
const coarsest = 100

// level is a graph with edge weights on the way from the finest to the coarsest.
type level struct {
	graph
	edge  []int32 // weight of each entry of adj
	total int32   // weight of all vertices
	up    []int32 // vertex -> vertex of the next coarser level
}

func (l *level) edges(i int32) (to, weight []int32) {
	return l.adj[l.ptr[i]:l.ptr[i+1]], l.edge[l.ptr[i]:l.ptr[i+1]]
}

// coarsen contracts a matching of heavy edges, over and over, and returns the
// levels, finest first (Karypis and Kumar, 'A Fast and High Quality Multilevel
// Scheme for Partitioning Irregular Graphs', SIAM J. Sci. Comput. 20, 1998).
func coarsen(l *level, rng *rand.Rand) []*level {
	levels := []*level{l}
	for l.order() > coarsest {
		next := l.contract(rng)
		if next.order() > l.order()*9/10 {
			break
		}
		levels = append(levels, next)
		l = next
	}
	return levels
}

// contract matches each vertex, in random order, with the free neighbour that its
// heaviest edge leads to, the lighter of equals, and merges the pairs.
func (l *level) contract(rng *rand.Rand) *level {
	n := l.order()
	l.up = make([]int32, n)
	for i := range l.up {
		l.up[i] = -1
	}
	pairs := make([][2]int32, 0, n)
	limit := max(4, 3*l.total/(2*coarsest)) // of the weight of a pair
	for _, v := range shuffled(n, rng) {
		if l.up[v] >= 0 {
			continue
		}
		best := v
		heaviest := int32(0)
		to, weight := l.edges(v)
		for k, u := range to {
			if l.up[u] >= 0 || weight[k] < heaviest || l.weight[v]+l.weight[u] > limit {
				continue
			}
			if weight[k] > heaviest || l.weight[u] < l.weight[best] {
				best, heaviest = u, weight[k]
			}
		}
		l.up[v], l.up[best] = int32(len(pairs)), int32(len(pairs))
		pairs = append(pairs, [2]int32{v, best})
	}
	c := &level{total: l.total, graph: graph{ptr: make([]int32, 1, len(pairs)+1), weight: make([]int32, len(pairs))}}
	c.adj, c.edge = make([]int32, 0, len(l.adj)), make([]int32, 0, len(l.adj))
	at := make([]int32, len(pairs)) // where edge (i, at) lies, if at least since
	for i := range at {
		at[i] = -1
	}
	for i, p := range pairs {
		since := int32(len(c.adj))
		for k, v := range p {
			if k == 1 && v == p[0] {
				break
			}
			c.weight[i] += l.weight[v]
			to, weight := l.edges(v)
			for k, u := range to {
				j := l.up[u]
				switch {
				case j == int32(i):
				case at[j] >= since:
					c.edge[at[j]] += weight[k]
				default:
					at[j] = int32(len(c.adj))
					c.adj = append(c.adj, j)
					c.edge = append(c.edge, weight[k])
				}
			}
		}
		c.ptr = append(c.ptr, int32(len(c.adj)))
	}
	return c
}

func shuffled(n int, rng *rand.Rand) []int32 {
	p := make([]int32, n)
	for i := range p {
		p[i] = int32(i)
	}
	rng.Shuffle(n, func(i, j int) { p[i], p[j] = p[j], p[i] })
	return p
}
