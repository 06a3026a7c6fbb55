package partition

// candidate is a pose with the bytes that eliminating it would add.
type candidate struct {
	delta int
	pose  int32
}

func (a candidate) before(b candidate) bool {
	return a.delta < b.delta || a.delta == b.delta && a.pose < b.pose
}

// queue is a binary heap, cheapest candidate first. It is lazy: a pose whose price changed is entered again, and whoever takes an
// entry out checks that it still holds.
type queue []candidate

func (q queue) init() {
	for i := len(q)/2 - 1; i >= 0; i-- {
		q.sink(i)
	}
}

func (q *queue) push(c candidate) {
	h := append(*q, c)
	i := len(h) - 1
	for i > 0 {
		up := (i - 1) / 2
		if !c.before(h[up]) {
			break
		}
		h[i] = h[up]
		i = up
	}
	h[i] = c
	*q = h
}

func (q *queue) pop() candidate {
	h := *q
	top := h[0]
	last := len(h) - 1
	h[0] = h[last]
	*q = h[:last]
	q.sink(0)
	return top
}

func (q queue) sink(i int) {
	if i >= len(q) {
		return
	}
	c := q[i]
	for {
		child := 2*i + 1
		if child >= len(q) {
			break
		}
		if child+1 < len(q) && q[child+1].before(q[child]) {
			child++
		}
		if !q[child].before(c) {
			break
		}
		q[i] = q[child]
		i = child
	}
	q[i] = c
}

// arena hands out small slices cut from large ones.
type arena[T any] struct{ free []T }

// take returns a zeroed slice of n entries that cannot grow into its neighbour.
func (a *arena[T]) take(n int) []T {
	if n > len(a.free) {
		a.free = make([]T, max(n, 4096))
	}
	s := a.free[:n:n]
	a.free = a.free[n:]
	return s
}
