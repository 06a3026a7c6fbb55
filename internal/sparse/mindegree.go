package sparse

import "math"

// minimumDegree returns an elimination order of the vertices that are not in
// halo; halo vertices take part in every degree but are never eliminated.
//
// It is the approximate minimum degree method of Amestoy, Davis and Duff (1996)
// on the quotient graph: a pivot becomes an element that stands for the clique
// of its neighbours; elements inside the new one are absorbed; neighbours with
// equal lists are merged and eliminated together. Of vertices that tie at the start
// the first is taken, or the last. Hubs, whose lists would be read for each of their
// neighbours, stay out of the graph and come last.
func minimumDegree(g *graph, halo []bool, lastFirst bool) []int32 {
	q := newQuotient(g, halo, lastFirst)
	for q.open > 0 {
		q.eliminate(q.pop())
	}
	return append(q.order, q.hubs...)
}

// isHub reports whether a vertex of n has so many neighbours that it is set aside.
func isHub(degree, n int) bool { return float64(degree) > max(16, 10*math.Sqrt(float64(n))) }

type vertexState uint8

const (
	variable vertexState = iota
	element
	gone
)

// quotient is the quotient graph. The list of a variable holds its elements
// first, then its remaining variables; the list of an element holds variables.
type quotient struct {
	halo   []bool
	lists  []int32 // element lists are appended, variable lists shrink in place
	start  []int32
	length []int32
	nelem  []int32 // elements at the head of a variable's list
	weight []int32 // of a variable with all merged into it; 0 = not a live variable
	degree []int32 // variable: upper bound of its external degree; element: weight of its list
	state  []vertexState

	bucket     []int32 // head of the list of variables by degree
	next, prev []int32
	least      int32 // no non-empty bucket below

	member []int32 // member[i] == step: i belongs to the element being built
	step   int32
	stamp  []int64 // for elements: stamp - base = weight outside the new element
	base   int64

	hashHead, hashNext []int32
	hash               []int32

	chain, chainEnd []int32 // variables merged into one, in order

	remaining int32 // weight not yet eliminated, halo included
	open      int   // variables outside halo not yet eliminated
	order     []int32
	hubs      []int32
}

func newQuotient(g *graph, halo []bool, lastFirst bool) *quotient {
	n := g.order()
	ints := make([]int32, 14*n)
	take := func() []int32 {
		s := ints[:n:n]
		ints = ints[n:]
		return s
	}
	q := &quotient{
		halo: halo, start: take(), length: take(), nelem: take(), weight: take(), degree: take(),
		next: take(), prev: take(), member: take(), hashHead: take(), hashNext: take(), hash: take(),
		chain: take(), chainEnd: take(), order: take()[:0],
		state: make([]vertexState, n), stamp: make([]int64, n), base: 1,
	}
	q.lists = make([]int32, len(g.adj), 3*len(g.adj)+n)
	copy(q.lists, g.adj)
	for i, w := range g.weight {
		if !isHub(len(g.neighbours(int32(i))), n) {
			q.weight[i] = w
			q.remaining += w
		} else if q.state[i] = gone; !halo[i] {
			q.hubs = append(q.hubs, int32(i))
		}
	}
	q.bucket = make([]int32, q.remaining+1)
	for i := range q.bucket {
		q.bucket[i] = -1
	}
	for i := range int32(n) {
		q.start[i] = g.ptr[i]
		q.length[i] = g.ptr[i+1] - g.ptr[i]
		q.chain[i] = -1
		q.chainEnd[i] = i
		q.hashHead[i] = -1
		for _, j := range g.neighbours(i) {
			q.degree[i] += q.weight[j]
		}
	}
	for k := range int32(n) {
		i := k // the latest pushed comes out first
		if !lastFirst {
			i = int32(n) - 1 - k
		}
		if !halo[i] && q.state[i] != gone {
			q.open++
			q.push(i)
		}
	}
	return q
}

func (q *quotient) push(i int32) {
	d := q.degree[i]
	h := q.bucket[d]
	q.next[i], q.prev[i] = h, -1
	if h >= 0 {
		q.prev[h] = i
	}
	q.bucket[d] = i
	if d < q.least {
		q.least = d
	}
}

func (q *quotient) remove(i int32) {
	if q.prev[i] >= 0 {
		q.next[q.prev[i]] = q.next[i]
	} else {
		q.bucket[q.degree[i]] = q.next[i]
	}
	if q.next[i] >= 0 {
		q.prev[q.next[i]] = q.prev[i]
	}
}

func (q *quotient) pop() int32 {
	for q.bucket[q.least] < 0 {
		q.least++
	}
	i := q.bucket[q.least]
	q.remove(i)
	return i
}

// merge lets variable i stand for j too; j leaves the graph.
func (q *quotient) merge(i, j int32) {
	q.chain[q.chainEnd[i]] = j
	q.chainEnd[i] = q.chainEnd[j]
	q.weight[j] = 0
	q.state[j] = gone
}

// eliminate turns variable me into an element.
func (q *quotient) eliminate(me int32) {
	pivotWeight := q.weight[me]
	q.weight[me] = 0
	first, size := q.gather(me)
	q.measure(first)
	for _, i := range q.lists[first:] {
		if q.update(i, me) {
			pivotWeight += q.weight[i]
			size -= q.weight[i]
			q.merge(me, i)
		}
	}
	q.base += int64(len(q.bucket)) // every stamp set so far lies below
	q.mergeAlike(first)
	q.remaining -= pivotWeight

	kept := first
	for k := first; k < len(q.lists); k++ {
		i := q.lists[k]
		if q.weight[i] == 0 {
			continue
		}
		q.lists[kept] = i
		kept++
		q.degree[i] = max(0, min(q.degree[i]+size-q.weight[i], q.remaining-q.weight[i]))
		if !q.halo[i] {
			q.push(i)
		}
	}
	q.lists = q.lists[:kept]
	q.start[me], q.length[me], q.degree[me] = int32(first), int32(kept-first), size
	q.state[me] = element
	if kept == first {
		q.state[me] = gone
	}
	for i := me; i >= 0; i = q.chain[i] {
		q.order = append(q.order, i)
		q.open--
	}
}

// gather appends the list of the new element me and returns where it starts and
// its weight. The elements of me are absorbed.
func (q *quotient) gather(me int32) (first int, size int32) {
	q.step++
	first = len(q.lists)
	add := func(list []int32) {
		for _, i := range list {
			if q.weight[i] > 0 && q.member[i] != q.step {
				q.member[i] = q.step
				q.lists = append(q.lists, i)
				size += q.weight[i]
				if !q.halo[i] {
					q.remove(i)
				}
			}
		}
	}
	own := q.lists[q.start[me] : q.start[me]+q.length[me]]
	for _, e := range own[:q.nelem[me]] {
		if q.state[e] == element {
			add(q.lists[q.start[e] : q.start[e]+q.length[e]])
			q.state[e] = gone
		}
	}
	add(own[q.nelem[me]:])
	return first, size
}

// measure sets, for each element that touches the new one, the weight of its
// list outside the new one.
func (q *quotient) measure(first int) {
	for _, i := range q.lists[first:] {
		w := int64(q.weight[i])
		for _, e := range q.lists[q.start[i] : q.start[i]+q.nelem[i]] {
			if q.state[e] != element {
				continue
			}
			if q.stamp[e] < q.base {
				q.stamp[e] = int64(q.degree[e]) + q.base
			}
			q.stamp[e] -= w
		}
	}
}

// update rewrites the list of i, a neighbour of the new element me, and bounds
// the part of its degree outside me. It reports whether i has no neighbour
// outside me and so can be eliminated together with me.
func (q *quotient) update(i, me int32) bool {
	begin := q.start[i]
	end := begin + q.length[i]
	put := begin
	var degree, hash int32
	for _, e := range q.lists[begin : begin+q.nelem[i]] {
		if q.state[e] != element {
			continue
		}
		outside := int32(q.stamp[e] - q.base)
		if outside == 0 {
			q.state[e] = gone // inside me: absorbed though not adjacent to the pivot
			continue
		}
		degree += outside
		q.lists[put] = e
		put++
		hash += e
	}
	vars := put
	for _, j := range q.lists[begin+q.nelem[i] : end] {
		if q.weight[j] > 0 && q.member[j] != q.step {
			degree += q.weight[j]
			q.lists[put] = j
			put++
			hash += j
		}
	}
	if degree == 0 && !q.halo[i] {
		q.hash[i] = 0
		return true
	}
	// The list has lost an entry at least (me or an element of me): me fits in.
	q.lists[put] = q.lists[vars]
	q.lists[vars] = q.lists[begin]
	q.lists[begin] = me
	q.nelem[i] = vars - begin + 1
	q.length[i] = put - begin + 1
	q.degree[i] = min(q.degree[i], degree)

	h := int32(uint32(hash) % uint32(len(q.hashHead)))
	q.hash[i] = h
	q.hashNext[i] = q.hashHead[h]
	q.hashHead[h] = i
	return false
}

// mergeAlike merges the members of the new element that have equal lists.
func (q *quotient) mergeAlike(first int) {
	for k := first; k < len(q.lists); k++ {
		i := q.lists[k]
		if q.weight[i] == 0 {
			continue
		}
		h := q.hash[i]
		i = q.hashHead[h]
		q.hashHead[h] = -1
		for ; i >= 0 && q.hashNext[i] >= 0; i = q.hashNext[i] {
			q.base++
			list := q.lists[q.start[i] : q.start[i]+q.length[i]]
			for _, x := range list {
				q.stamp[x] = q.base
			}
			last := i
			for j := q.hashNext[i]; j >= 0; j = q.hashNext[j] {
				if q.alike(i, j) {
					q.weight[i] += q.weight[j]
					q.merge(i, j)
					q.hashNext[last] = q.hashNext[j]
				} else {
					last = j
				}
			}
		}
	}
	q.base++
}

// alike reports whether the list of j has exactly the stamped entries of i.
func (q *quotient) alike(i, j int32) bool {
	if q.length[i] != q.length[j] || q.nelem[i] != q.nelem[j] || q.halo[i] != q.halo[j] {
		return false
	}
	for _, x := range q.lists[q.start[j] : q.start[j]+q.length[j]] {
		if q.stamp[x] != q.base {
			return false
		}
	}
	return true
}
