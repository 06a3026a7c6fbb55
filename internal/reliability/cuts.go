package reliability

// Cuts says which edges of a graph no test can tell apart, when every edge is a measurement of all that connects its two ends: two
// edges whose loss together parts what one of them alone does not are on the very same loops, so that an error of either leaves the
// same traces. Class 0 are the bridges: edges on no loop, which nothing checks. All other edges are numbered by their set in the
// order of their first edge, also those that stand alone. Loops of an edge with itself must not be there; parallel edges may.
//
// Every edge outside a spanning forest gets a label of 128 bits, every edge of the forest the sum (exclusive or) of the labels of
// the edges whose loop it closes: an edge is a bridge if its label is zero, two edges are a cut if their labels are equal. The
// converse fails with probability 2^-128 a pair. Pritchard and Thurimella, 'Fast Computation of Small Cuts via Cycle Space
// Sampling', ACM Transactions on Algorithms 7, 2011. The labels come from a fixed sequence: the same graph, the same answer.
func Cuts(nodes int, edges [][2]int32) []int32 {
	type arc struct{ edge, next int32 }
	first := make([]int32, nodes)
	for i := range first {
		first[i] = -1
	}
	arcs := make([]arc, 0, 2*len(edges))
	for k, e := range edges {
		for _, v := range e {
			arcs = append(arcs, arc{int32(k), first[v]})
			first[v] = int32(len(arcs) - 1)
		}
	}
	up := make([]int32, nodes) // edge to the parent, -1 at a root, -2 unseen
	for i := range up {
		up[i] = -2
	}
	order := make([]int32, 0, nodes)
	for root := range nodes {
		if up[root] != -2 {
			continue
		}
		up[root] = -1
		order = append(order, int32(root))
		for head := len(order) - 1; head < len(order); head++ {
			v := order[head]
			for a := first[v]; a >= 0; a = arcs[a].next {
				k := arcs[a].edge
				w := edges[k][0] + edges[k][1] - v
				if up[w] == -2 {
					up[w] = k
					order = append(order, w)
				}
			}
		}
	}
	labels := make([]label, len(edges))
	sum := make([]label, nodes)
	var seed uint64
	for k, e := range edges {
		if up[e[0]] == int32(k) || up[e[1]] == int32(k) {
			continue
		}
		labels[k] = label{draw(&seed), draw(&seed)}
		sum[e[0]].add(labels[k])
		sum[e[1]].add(labels[k])
	}
	for i := len(order) - 1; i >= 0; i-- {
		v := order[i]
		if k := up[v]; k >= 0 {
			labels[k] = sum[v]
			sum[edges[k][0]+edges[k][1]-v].add(sum[v])
		}
	}
	class := make([]int32, len(edges))
	number := map[label]int32{{}: 0}
	for k, l := range labels {
		n, known := number[l]
		if !known {
			n = int32(len(number))
			number[l] = n
		}
		class[k] = n
	}
	return class
}

type label [2]uint64

func (l *label) add(m label) {
	l[0] ^= m[0]
	l[1] ^= m[1]
}

// draw returns the next number of a fixed sequence (Steele, Lea, Flood, 'Fast Splittable Pseudorandom Number Generators',
// OOPSLA 2014).
func draw(state *uint64) uint64 {
	*state += 0x9e3779b97f4a7c15
	z := *state
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	return z ^ z>>31
}
