package sparse

import "math"

// Models of the time to find an order, in nanoseconds for each vertex and edge. The
// fill of a minimum degree order varies by some tenths with the breaking of ties, and
// a dissection saves a tenth or more where the separators are large; either is tried
// when a tenth of ten factorisations, an adjustment's worth, exceeds the cost.
const (
	degreeCost  = 100 // once more
	dissectCost = 500 // on each depth
)

// chooseOrder orders the graph and returns its elimination forest.
func chooseOrder(g *graph, isLast []bool, o Options) *forest {
	plant := func(order []int32) *forest {
		return newForest(g, append(order, o.Last...), len(order))
	}
	if o.Ordering == NestedDissection {
		return plant(nestedDissection(g, isLast))
	}
	best := plant(minimumDegree(g, isLast, false))
	try := func(order []int32) {
		if f := plant(order); f.flops() < best.flops() {
			best = f
		}
	}
	size := float64(g.order() + len(g.adj))
	if flopCost*best.flops() > degreeCost*size {
		try(minimumDegree(g, isLast, true))
	}
	depth := math.Log2(float64(g.order()) / leafSize)
	if o.Ordering == Auto && depth > 2 && flopCost*best.flops() > dissectCost*depth*size {
		try(nestedDissection(g, isLast))
	}
	return best
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
