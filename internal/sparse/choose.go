package sparse

import "math"

// dissectCost models the time to find a dissection: nanoseconds for each vertex and
// edge on each depth. Where minimum degree leaves much to gain, a dissection saves a
// tenth or more of each factorisation; Auto looks for one when ten times a tenth
// exceeds the cost.
const dissectCost = 500

// chooseOrder orders the graph and returns its elimination forest.
func chooseOrder(g *graph, isLast []bool, o Options) *forest {
	by := func(method func(*graph, []bool) []int32) *forest {
		order := method(g, isLast)
		return newForest(g, append(order, o.Last...), len(order))
	}
	if o.Ordering == NestedDissection {
		return by(nestedDissection)
	}
	f := by(minimumDegree)
	if o.Ordering == MinimumDegree || g.order() <= 4*leafSize {
		return f
	}
	cuts := math.Log2(float64(g.order()) / leafSize)
	if flopCost*f.flops() < dissectCost*cuts*float64(g.order()+len(g.adj)) {
		return f
	}
	if d := by(nestedDissection); d.flops() < f.flops() {
		return d
	}
	return f
}

// flops returns the operations of a factorisation without merged supernodes and
// without the front of the last ones.
func (f *forest) flops() float64 {
	sum := 0.0
	for j, h := range f.height {
		sum += frontFlops(3*float64(f.g.weight[f.order[j]]), 3*float64(h))
	}
	return sum
}
