package sparse

// supernodes partitions the free columns into groups that share their rows below,
// merged as far as the time model approves.
type supernodes struct {
	count int
	// of each supernode, in postorder
	columns [][2]int32 // range of positions in order, see below
	rows    [][2]int32 // range in rowList
	parent  []int32    // count = none
	// order is the final elimination order of all vertices: supernode after
	// supernode, then the last ones; place its inverse.
	order, place []int32
	rowList      []int32 // positions, ascending within a supernode
}

// Time model of one front with k pivots and r rows below, both in scalars, in
// nanoseconds: a constant, the numbers moved, and the operations.
const (
	frontCost = 150
	moveCost  = 1
	flopCost  = 0.06
)

func frontFlops(k, r float64) float64 {
	return k*k*k/3 + k*k*r + k*r*(r+1)
}

func frontTime(k, r float64) float64 {
	return frontCost + moveCost*(k*(k+r)+r*r) + flopCost*frontFlops(k, r)
}

// newSupernodes gathers the columns of f.
func newSupernodes(f *forest) *supernodes {
	top := fundamental(f)
	into := amalgamate(f, top)

	// Number the survivors. A survivor is the highest of its members, so that
	// ascending order of the survivors is a postorder of what is left.
	s := &supernodes{}
	number := make([]int32, len(top)) // of the fundamental supernodes, then of the merged ones
	for i := range top {
		if into[i] == int32(i) {
			number[i] = int32(s.count)
			s.count++
		}
	}
	for i := len(top) - 1; i >= 0; i-- {
		number[i] = number[into[i]]
	}

	s.columns = make([][2]int32, s.count)
	for i, t := range top {
		s.columns[number[i]][1] += t - first(top, i) + 1
	}
	at := int32(0)
	for k := range s.columns {
		size := s.columns[k][1]
		s.columns[k] = [2]int32{at, at}
		at += size
	}
	s.order = make([]int32, len(f.order))
	s.place = make([]int32, len(f.order))
	for i, t := range top {
		c := &s.columns[number[i]]
		for j := first(top, i); j <= t; j++ {
			s.order[c[1]] = f.order[j]
			c[1]++
		}
	}
	copy(s.order[f.free:], f.order[f.free:])
	for k, v := range s.order {
		s.place[v] = int32(k)
	}
	s.collectRows(f, top, into, number)
	return s
}

func first(top []int32, i int) int32 {
	if i == 0 {
		return 0
	}
	return top[i-1] + 1
}

// fundamental returns the last column of each chain of columns with nested rows.
func fundamental(f *forest) (top []int32) {
	children := make([]int32, f.free+1)
	for _, p := range f.parent {
		children[p]++
	}
	top = make([]int32, 0, f.free)
	for j := range int32(f.free) {
		p := f.parent[j]
		if p == j+1 && int(p) < f.free && f.below[j] == f.below[p]+1 && children[p] == 1 {
			continue
		}
		top = append(top, j)
	}
	return top
}

// amalgamate merges children into parents, bottom-up, the child with the largest
// gain in the time model first. into[i] is the supernode that swallowed i, or i.
func amalgamate(f *forest, top []int32) (into []int32) {
	n := len(top)
	pivots, rows := make([]float64, n), make([]float64, n)
	into = make([]int32, n)
	of := make([]int32, f.free)
	for i, t := range top {
		into[i] = int32(i)
		w := int32(0)
		for j := first(top, i); j <= t; j++ {
			of[j] = int32(i)
			w += f.g.weight[f.order[j]]
		}
		pivots[i], rows[i] = 3*float64(w), 3*float64(f.height[t])
	}
	child, sibling := make([]int32, n), make([]int32, n)
	for i := range child {
		child[i] = -1
	}
	for i := range int32(n) {
		// All children of i lie below i and have hung themselves on it by now.
		own := frontTime(pivots[i], rows[i])
		for {
			best, gain, before, previous := int32(-1), 0.0, int32(-1), int32(-1)
			for c := child[i]; c >= 0; c = sibling[c] {
				g := own + frontTime(pivots[c], rows[c]) - frontTime(pivots[i]+pivots[c], rows[i])
				if g > gain {
					best, gain, before = c, g, previous
				}
				previous = c
			}
			if best < 0 {
				break
			}
			into[best] = i
			pivots[i] += pivots[best]
			own = frontTime(pivots[i], rows[i])
			if before < 0 {
				child[i] = sibling[best]
			} else {
				sibling[before] = sibling[best]
			}
			for c := child[best]; c >= 0; {
				next := sibling[c]
				sibling[c], child[i] = child[i], c
				c = next
			}
		}
		if p := f.parent[top[i]]; int(p) < f.free {
			sibling[i], child[of[p]] = child[of[p]], i
		}
	}
	return into
}

// collectRows fills the row lists, and the parents with them. The rows of a merged
// supernode are those of the last column of its highest member.
func (s *supernodes) collectRows(f *forest, top, into, number []int32) {
	ends := make([]int32, f.free) // supernode whose rows are those of this column, or -1
	for j := range ends {
		ends[j] = -1
	}
	s.rows = make([][2]int32, s.count)
	total := int32(0)
	for i, t := range top {
		if into[i] == int32(i) {
			ends[t] = number[i]
			s.rows[number[i]] = [2]int32{total, total}
			total += f.below[t]
		}
	}
	s.rowList = make([]int32, total)
	// Rows in their final order, so that each list comes out ascending.
	byPlace := make([]int32, len(s.order))
	for k, v := range s.order {
		byPlace[k] = f.place[v]
	}
	f.visit(byPlace, func(i, k int32) {
		if e := ends[k]; e >= 0 {
			r := &s.rows[e]
			s.rowList[r[1]] = s.place[f.order[i]]
			r[1]++
		}
	})
	s.parent = make([]int32, s.count)
	for k := range s.parent {
		s.parent[k] = int32(s.count)
	}
	home := make([]int32, f.free)
	for k, c := range s.columns {
		for j := c[0]; j < c[1]; j++ {
			home[j] = int32(k)
		}
	}
	for k, r := range s.rows {
		if r[0] < r[1] && int(s.rowList[r[0]]) < f.free {
			s.parent[k] = home[s.rowList[r[0]]]
		}
	}
}
