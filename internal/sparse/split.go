package sparse

import (
	"cmp"
	"slices"
)

// Fronts of at least this many operations are worth two workers, and so are
// factorisations of at least splitFlops.
const (
	sharedFlops = 5e5
	splitFlops  = 2e7
)

// split divides the tree between the workers: whole subtrees for each, as equal as
// the tree allows, and the fronts above for both (Geist and Ng, 'Task Scheduling
// for Parallel Sparse Cholesky Factorization', Int. J. Parallel Program. 18, 1989).
func (s *Symbolic) split() {
	n := len(s.fronts)
	if s.flops < splitFlops {
		s.workers = 1
	}
	if s.workers == 1 {
		s.tasks[0] = make([]int32, n)
		for i := range s.tasks[0] {
			s.tasks[0][i] = int32(i)
		}
		return
	}
	whole := make([]float64, n) // time of each subtree
	var roots []int32
	for i := range s.fronts {
		f := &s.fronts[i]
		f.shared = frontFlops(float64(f.k), float64(f.r)) >= sharedFlops
		whole[i] += frontTime(float64(f.k), float64(f.r))
		if p := int(f.parent); p < n {
			whole[p] += whole[i]
		} else {
			roots = append(roots, int32(i))
		}
	}
	// Replace the heaviest subtree by its children as long as that shortens the
	// whole; look a few steps past a standstill.
	side := make([]int8, n)
	best, above, patience := assign(roots, whole, nil), 0.0, 0
	bestRoots := append([]int32(nil), roots...)
	for patience < 8 {
		h := 0
		for k, i := range roots {
			if whole[i] > whole[roots[h]] {
				h = k
			}
		}
		t := &s.fronts[roots[h]]
		if t.child[0] == t.child[1] {
			break
		}
		own := frontTime(float64(t.k), float64(t.r))
		if t.shared {
			own *= 0.6
		}
		above += own
		roots[h] = roots[len(roots)-1]
		roots = append(roots[:len(roots)-1], s.children[t.child[0]:t.child[1]]...)
		if time := above + assign(roots, whole, nil); time < best {
			best, patience = time, 0
			bestRoots = append(bestRoots[:0], roots...)
		} else {
			patience++
		}
	}
	for i := range side {
		side[i] = 2
	}
	assign(bestRoots, whole, side)
	for i := n - 1; i >= 0; i-- { // subtrees follow their roots
		if p := int(s.fronts[i].parent); p < n && side[p] < 2 {
			side[i] = side[p]
		}
	}
	for i, w := range side {
		if w < 2 {
			s.tasks[w] = append(s.tasks[w], int32(i))
		} else {
			s.top = append(s.top, int32(i))
		}
	}
}

// assign gives the subtrees to two workers, heaviest first to the less loaded one,
// and returns the larger load.
func assign(roots []int32, whole []float64, side []int8) float64 {
	sorted := append([]int32(nil), roots...)
	slices.SortFunc(sorted, func(a, b int32) int {
		return cmp.Or(cmp.Compare(whole[b], whole[a]), cmp.Compare(a, b))
	})
	var load [2]float64
	for _, i := range sorted {
		w := 0
		if load[1] < load[0] {
			w = 1
		}
		load[w] += whole[i]
		if side != nil {
			side[i] = int8(w)
		}
	}
	return max(load[0], load[1])
}

// stack places the updates. Each worker has two stacks, by parity of the depth in
// the tree: a front is written to one while its children are read from the other.
// The fronts above the subtrees have a pair of their own.
func (s *Symbolic) stack() {
	n := len(s.fronts)
	pair := make([]int8, n)
	for _, i := range s.tasks[1] {
		pair[i] = 2
	}
	for _, i := range s.top {
		pair[i] = 4
	}
	odd := make([]int8, n)
	var height, most [6]int
	for i := n - 1; i >= 0; i-- {
		if p := int(s.fronts[i].parent); p < n {
			odd[i] = 1 - odd[p]
		}
	}
	for i := range s.fronts {
		f := &s.fronts[i]
		for _, c := range s.children[f.child[0]:f.child[1]] {
			if pair[c] == pair[i] {
				w := &s.fronts[c]
				height[pair[c]+odd[c]] -= w.ldr * w.r
			}
		}
		a := pair[i] + odd[i]
		f.u = height[a]
		height[a] += f.ldr * f.r
		most[a] = max(most[a], height[a])
	}
	var base [6]int
	for a, m := range most {
		base[a] = s.stackLen
		s.stackLen += m
	}
	for i := range s.fronts {
		s.fronts[i].u += base[pair[i]+odd[i]]
	}
}
