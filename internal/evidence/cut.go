package evidence

import "math/bits"

// unitSet is a set of units.
type unitSet []uint64

func newSet(n int) unitSet { return make(unitSet, (n+63)/64) }

func (s unitSet) add(u int)      { s[u>>6] |= 1 << (u & 63) }
func (s unitSet) has(u int) bool { return s[u>>6]>>(u&63)&1 == 1 }

func (s unitSet) with(u int) unitSet {
	t := append(unitSet(nil), s...)
	t.add(u)
	return t
}

func (s unitSet) meets(t unitSet) bool {
	for w := range s {
		if s[w]&t[w] != 0 {
			return true
		}
	}
	return false
}

func (s unitSet) each(do func(u int)) {
	for w, x := range s {
		for ; x != 0; x &= x - 1 {
			do(w<<6 | bits.TrailingZeros64(x))
		}
	}
}

// cut returns the least capacity that parts the units of stay from those of goes, and marks in f.moved the side of goes
// (breadth-first augmenting paths: Edmonds, Karp, "Theoretical improvements in algorithmic efficiency for network flow
// problems", JACM 19(2), 1972). It stops above limit.
func (f *fleet) cut(stay, goes unitSet, limit int) int {
	n := f.n
	copy(f.flow, f.capacity) // what is left of each capacity
	total := 0
	for {
		for u := range f.from {
			f.from[u] = -1
		}
		q := f.queue[:0]
		stay.each(func(u int) { f.from[u] = u; q = append(q, u) })
		end := -1
		for k := 0; k < len(q) && end < 0; k++ {
			u := q[k]
			row := f.flow[u*n : u*n+n]
			for v, left := range row {
				if left > 0 && f.from[v] < 0 {
					f.from[v] = u
					if goes.has(v) {
						end = v
						break
					}
					q = append(q, v)
				}
			}
		}
		if end < 0 {
			break
		}
		push := f.flow[f.from[end]*n+end]
		for v := end; f.from[v] != v; v = f.from[v] {
			push = min(push, f.flow[f.from[v]*n+v])
		}
		for v := end; f.from[v] != v; v = f.from[v] {
			f.flow[f.from[v]*n+v] -= push
			f.flow[v*n+f.from[v]] += push
		}
		if total += push; total > limit {
			return total
		}
	}
	for u := range f.moved {
		f.moved[u] = f.from[u] < 0
	}
	return total
}

// bound numbers the units so that those with the same number are bound to each other by more than limit: no cut worth looking
// at parts them.
func (f *fleet) bound(limit int) []int {
	class := make([]int, f.n)
	for u := range class {
		class[u] = u
		for v := 0; v < u; v++ {
			// Being bound is transitive, so the lowest of each class stands for it.
			if class[v] == v && f.cut(newSet(f.n).with(u), newSet(f.n).with(v), limit) > limit {
				class[u] = v
				break
			}
		}
	}
	return class
}
