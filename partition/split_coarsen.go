package partition

import "math/rand/v2"

// splitHierarchy is a graph and its ever coarser contractions: up[l][v] is the
// vertex of levels[l+1] that holds vertex v of levels[l].
type splitHierarchy struct {
	levels []*splitGraph
	up     [][]int32
}

// coarsen begins with g, whose vertices are single poses, and contracts heavy-edge matchings (Karypis and Kumar, A Fast and High
// Quality Multilevel Scheme for Partitioning Irregular Graphs, SIAM J. Sci.
// Comput. 20(1), 1998) until at most target vertices remain or matching stops
// to pay. Vertices of different label are never merged; nil labels allow all.
func coarsen(g *splitGraph, target int, label []int64, rng *rand.Rand) *splitHierarchy {
	h := &splitHierarchy{levels: []*splitGraph{g}}
	heaviest := int32(max(2, 3*g.n/(2*target)))
	for g.n > target {
		cluster, nc := matchHeavy(g, heaviest, label, rng)
		if 20*nc > 19*g.n {
			break
		}
		if label != nil {
			coarse := make([]int64, nc)
			for v, c := range cluster {
				coarse[c] = label[v]
			}
			label = coarse
		}
		g = g.contract(cluster, nc)
		h.levels = append(h.levels, g)
		h.up = append(h.up, cluster)
	}
	return h
}

// matchHeavy pairs each vertex, in random order, with the free neighbour of
// the strongest tie for the size of the pair (the expansion rating of
// Holtgrewe, Sanders and Schulz, Engineering a Scalable High Quality Graph
// Partitioner, IPDPS 2010). A vertex that finds no free neighbour, as the
// leaves around a hub, joins a cluster beside it that is light enough.
func matchHeavy(g *splitGraph, heaviest int32, label []int64, rng *rand.Rand) (cluster []int32, nc int) {
	order := splitOrder(g.n, rng)
	cluster = make([]int32, g.n)
	for v := range cluster {
		cluster[v] = -1
	}
	weight := make([]int32, 0, g.n)
	for _, v := range order {
		if cluster[v] >= 0 {
			continue
		}
		mate, best := int32(-1), 0.0
		for i := g.start[v]; i < g.start[v+1]; i++ {
			u := g.adj[i]
			if cluster[u] >= 0 || g.weight[u]+g.weight[v] > heaviest || label != nil && label[u] != label[v] {
				continue
			}
			m := float64(g.mult[i])
			if r := m * m / float64(g.weight[u]); r > best {
				mate, best = u, r
			}
		}
		if mate >= 0 {
			cluster[v], cluster[mate] = int32(len(weight)), int32(len(weight))
			weight = append(weight, g.weight[v]+g.weight[mate])
		}
	}
	for _, v := range order {
		if cluster[v] >= 0 {
			continue
		}
		join, best := int32(-1), 0.0
		for i := g.start[v]; i < g.start[v+1]; i++ {
			u := g.adj[i]
			c := cluster[u]
			if c < 0 || weight[c]+g.weight[v] > heaviest || label != nil && label[u] != label[v] {
				continue
			}
			m := float64(g.mult[i])
			if r := m * m / float64(weight[c]); r > best {
				join, best = c, r
			}
		}
		if join < 0 {
			join = int32(len(weight))
			weight = append(weight, 0)
		}
		cluster[v] = join
		weight[join] += g.weight[v]
	}
	return cluster, len(weight)
}

// splitOrder returns 0 up to n in random order.
func splitOrder(n int, rng *rand.Rand) []int32 {
	order := make([]int32, n)
	for i := range order {
		order[i] = int32(i)
	}
	rng.Shuffle(n, func(i, j int) { order[i], order[j] = order[j], order[i] })
	return order
}
