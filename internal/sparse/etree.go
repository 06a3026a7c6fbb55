package sparse

// forest is the elimination forest of the block columns that are not forced
// last, in postorder (Liu, 'The Role of Elimination Trees in Sparse
// Factorization', SIAM J. Matrix Anal. Appl. 11, 1990).
//
// Positions count the elimination order. Columns 0..free-1 belong to the forest;
// the positions behind are the ones forced last, and appear as rows only.
type forest struct {
	g      *graph
	free   int
	order  []int32 // position -> vertex
	place  []int32 // vertex -> position
	parent []int32 // of each free column; free = none
	below  []int32 // blocks below the diagonal of each free column of L
	height []int32 // their weight
}

// newForest takes the order of the free vertices followed by the last ones.
func newForest(g *graph, order []int32, free int) *forest {
	n := len(order)
	f := &forest{g: g, free: free, order: order, place: make([]int32, n)}
	f.number()
	f.findParents()
	f.postorder()
	f.count()
	return f
}

func (f *forest) number() {
	for k, v := range f.order {
		f.place[v] = int32(k)
	}
}

func (f *forest) findParents() {
	free := int32(f.free)
	f.parent = make([]int32, free)
	above := make([]int32, free) // path compression
	for i := range free {
		f.parent[i], above[i] = free, free
		for _, v := range f.g.neighbours(f.order[i]) {
			for k := f.place[v]; k < i; {
				next := above[k]
				above[k] = i
				if next == free {
					f.parent[k] = i
					break
				}
				k = next
			}
		}
	}
}

// postorder renumbers the free columns so that each subtree is contiguous.
func (f *forest) postorder() {
	free := int32(f.free)
	child, sibling := make([]int32, free+1), make([]int32, free)
	for i := range child {
		child[i] = -1
	}
	for i := free - 1; i >= 0; i-- {
		sibling[i] = child[f.parent[i]]
		child[f.parent[i]] = i
	}
	order := make([]int32, 0, len(f.order))
	renamed := make([]int32, free+1)
	renamed[free] = free
	for at := child[free]; at >= 0; {
		for child[at] >= 0 {
			at, child[at] = child[at], -1
		}
		for {
			renamed[at] = int32(len(order))
			order = append(order, f.order[at])
			if sibling[at] >= 0 {
				at = sibling[at]
				break
			}
			at = f.parent[at]
			if at == free {
				at = -1
				break
			}
		}
	}
	parent := make([]int32, free)
	for i := range free {
		parent[renamed[i]] = renamed[f.parent[i]]
	}
	f.order = append(order, f.order[free:]...)
	f.parent = parent
	f.number()
}

// visit calls do(i, k) for each block (row i, column k) of L below the diagonal
// with a free column, for the given rows in the given order.
func (f *forest) visit(rows []int32, do func(i, k int32)) {
	free := int32(f.free)
	met := make([]int32, free)
	for i := range met {
		met[i] = -1
	}
	for _, i := range rows {
		if i < free {
			met[i] = i
		}
		for _, v := range f.g.neighbours(f.order[i]) {
			k := f.place[v]
			if k >= i {
				continue
			}
			for k < free && met[k] != i {
				met[k] = i
				do(i, k)
				k = f.parent[k]
			}
		}
	}
}

func (f *forest) count() {
	f.below, f.height = make([]int32, f.free), make([]int32, f.free)
	all := make([]int32, len(f.order))
	for i := range all {
		all[i] = int32(i)
	}
	f.visit(all, func(i, k int32) {
		f.below[k]++
		f.height[k] += f.g.weight[f.order[i]]
	})
}
