package posegraph

// SpanningTree sets the values of all poses that are not fixed by chaining relative poses outwards from the fixed ones, each
// pose by the fewest measurements. Poses that no chain reaches keep their values.
func SpanningTree(g *Graph, fixed []int32) {
	type arc struct {
		set  *Between
		k    int32
		next int32 // next arc of the same pose, -1 at the end
	}
	n := len(g.Values.Poses)
	first := make([]int32, n)
	for i := range first {
		first[i] = -1
	}
	var arcs []arc
	for _, s := range g.Sets {
		b, ok := s.(*Between)
		if !ok {
			continue
		}
		for k := range b.I {
			for _, v := range [2]int32{b.I[k], b.J[k]} {
				arcs = append(arcs, arc{b, int32(k), first[v]})
				first[v] = int32(len(arcs) - 1)
			}
		}
	}
	known := make([]bool, n)
	queue := append([]int32(nil), fixed...)
	for _, v := range fixed {
		known[v] = true
	}
	for len(queue) > 0 {
		v := queue[0]
		queue = queue[1:]
		for a := first[v]; a >= 0; a = arcs[a].next {
			b, k := arcs[a].set, arcs[a].k
			w, z := b.J[k], b.Z[k]
			if w == v {
				w, z = b.I[k], z.Inv()
			}
			if b.W[k] == 0 || known[w] {
				continue
			}
			known[w] = true
			g.Values.Poses[w] = g.Values.Poses[v].Mul(z)
			queue = append(queue, w)
		}
	}
}
