package partition

import "slices"

// ordering plays the elimination on node sets alone: which pose next, which terms it merges, where to stop. Sizes decide, so no
// number of any matrix is looked at, and steps that are later thrown away cost little.
type ordering struct {
	dim       int
	poses     int32     // nodes from here on are points
	nodes     [][]int32 // of each term, ascending: first the input's, then those made on the way
	size      []int     // bytes of each term
	of        [][]int32 // terms touching each pose
	separator []bool
	absorbed  []absorption // input terms inside another input term
	steps     []step

	gone  []bool
	delta []int // bytes that eliminating a pose would add, as last computed
	queue queue

	// scratch of look
	stamp     int32
	seen      []int32 // by pose
	counted   []int32 // by term
	count     []int32
	neighbour []int32
	merged    []int32

	// scratch of reconsider
	mark    int32
	marked  []int32 // by pose
	hits    []int32
	outside []int32

	ids arena[int32]
}

// absorption adds input term from to input term into, whose poses include its own.
type absorption struct{ from, into int32 }

// step eliminates one pose. All terms touching it, and those within its neighbours, become one over the neighbours.
type step struct {
	pose       int32
	neighbours []int32 // ascending
	merged     []int32 // terms, ascending
	into       int32   // the new term, or an older one that holds all neighbours, or -1: nothing remains
}

func newOrdering(dim, poses, n int, factors []Quadratic, separators []int32) *ordering {
	o := &ordering{
		dim:       dim,
		poses:     int32(poses),
		separator: make([]bool, n),
		gone:      make([]bool, n),
		delta:     make([]int, n),
		seen:      make([]int32, n),
		hits:      make([]int32, n),
		marked:    make([]int32, n),
		of:        make([][]int32, n),
		nodes:     make([][]int32, len(factors), len(factors)+n),
		size:      make([]int, len(factors), len(factors)+n),
		counted:   make([]int32, len(factors), len(factors)+n),
		count:     make([]int32, len(factors), len(factors)+n),
	}
	for _, v := range separators {
		o.separator[v] = true
	}
	degree := make([]int32, n)
	for i := range factors {
		for _, v := range factors[i].Nodes {
			degree[v]++
		}
	}
	for v, k := range degree {
		o.of[v] = o.ids.take(int(k))[:0]
	}
	o.place(factors)
	return o
}

// place enters the input's terms, largest first, so that one inside another is seen when it comes. Terms on one pose are left out.
func (o *ordering) place(factors []Quadratic) {
	order := make([]int32, 0, len(factors))
	sorted := true
	for i := range factors {
		if len(factors[i].Nodes) < 2 {
			continue
		}
		if k := len(order); k > 0 && len(factors[order[k-1]].Nodes) < len(factors[i].Nodes) {
			sorted = false
		}
		order = append(order, int32(i))
	}
	if !sorted {
		slices.SortStableFunc(order, func(a, b int32) int { return len(factors[b].Nodes) - len(factors[a].Nodes) })
	}
	for _, i := range order {
		set := o.ids.take(len(factors[i].Nodes))
		copy(set, factors[i].Nodes)
		slices.Sort(set)
		o.nodes[i], o.size[i] = set, o.bytes(set)
		if into := o.holderOf(set); into >= 0 {
			o.absorbed = append(o.absorbed, absorption{i, into})
			continue
		}
		for _, v := range set {
			o.of[v] = append(o.of[v], i)
		}
	}
}

// holderOf returns a term whose poses include the whole set, or -1.
func (o *ordering) holderOf(set []int32) int32 {
	o.stamp++
	for _, v := range set {
		for _, t := range o.of[v] {
			if o.tally(t) == len(set) {
				return t
			}
		}
	}
	return -1
}

// tally counts the visits to term t since the stamp was last changed.
func (o *ordering) tally(t int32) int {
	if o.counted[t] != o.stamp {
		o.counted[t], o.count[t] = o.stamp, 0
	}
	o.count[t]++
	return int(o.count[t])
}

// look finds what eliminating v would do: its neighbours (unordered), the terms that would merge, the term that already holds all
// neighbours and more (or -1), and the change of the summary's size. The slices are scratch.
func (o *ordering) look(v int32) (neighbours, merged []int32, holder int32, delta int) {
	o.stamp++
	near, merged := o.neighbour[:0], o.merged[:0]
	o.seen[v] = o.stamp
	for _, t := range o.of[v] {
		delta -= o.size[t]
		merged = append(merged, t)
		o.counted[t], o.count[t] = o.stamp, -1<<30 // merged already
		for _, u := range o.nodes[t] {
			if o.seen[u] != o.stamp {
				o.seen[u] = o.stamp
				near = append(near, u)
			}
		}
	}
	holder = -1
	for _, u := range near {
		for _, t := range o.of[u] {
			switch c := o.tally(t); {
			case c == len(o.nodes[t]):
				delta -= o.size[t]
				merged = append(merged, t)
			case c == len(near):
				holder = t // perhaps equal so far and larger: the case above comes first for an equal one
			}
		}
	}
	if len(near) < 2 {
		holder = -1 // nothing remains to be held
	}
	points := 0
	if o.poses < int32(len(o.of)) {
		for _, u := range near {
			if u >= o.poses {
				points++
			}
		}
	}
	if holder < 0 {
		delta += cliqueBytes(o.dim, len(near)-points, points)
	}
	o.neighbour, o.merged = near, merged
	if points > 0 && points == len(near) {
		return near, merged, holder, never // points without a pose would be free to turn
	}
	return near, merged, holder, delta - o.nodeBytes(v)
}

// run orders every connected part and keeps of each the steps that lead to its shortest summary.
func (o *ordering) run() {
	for _, part := range o.parts() {
		o.runPart(part)
	}
}

func (o *ordering) runPart(part []int32) {
	total, shared, separators := 0, 0, 0
	o.queue = o.queue[:0]
	for _, v := range part {
		total += o.nodeBytes(v)
		for _, t := range o.of[v] {
			if o.nodes[t][0] == v {
				total += o.size[t]
				shared = max(shared, o.separatorsIn(o.nodes[t]))
			}
		}
		if o.separator[v] {
			separators += o.nodeBytes(v)
			continue
		}
		_, _, _, o.delta[v] = o.look(v)
		o.queue = append(o.queue, candidate{o.delta[v], v})
	}
	o.queue.init()
	best, kept := total, len(o.steps)
	for left := len(part); left > 1 && len(o.queue) > 0; {
		top := o.queue.pop()
		if o.gone[top.pose] || top.delta != o.delta[top.pose] {
			continue // an entry that a newer one replaced
		}
		neighbours, merged, holder, delta := o.look(top.pose)
		if delta != top.delta { // it rose unnoticed; falls are entered when they happen
			o.delta[top.pose] = delta
			o.queue.push(candidate{delta, top.pose})
			continue
		}
		if delta == never {
			break // and all that are left cost more
		}
		o.eliminate(top.pose, neighbours, merged, holder)
		left--
		total += delta
		if total <= best {
			best, kept = total, len(o.steps)
		}
		// Separators that meet in one term stay together in one to the end: no later summary is shorter than that.
		s := &o.steps[len(o.steps)-1]
		shared = max(shared, o.separatorsIn(s.neighbours))
		if separators+shared > best {
			break
		}
		o.reconsider(s)
	}
	o.steps = o.steps[:kept]
}

// separatorsIn returns the bytes of a clique of the separators in a set.
func (o *ordering) separatorsIn(set []int32) int {
	poses, points := 0, 0
	for _, v := range set {
		switch {
		case !o.separator[v]:
		case v < o.poses:
			poses++
		default:
			points++
		}
	}
	return cliqueBytes(o.dim, poses, points)
}

// eliminate enters the step and changes the node sets.
func (o *ordering) eliminate(v int32, neighbours, merged []int32, holder int32) {
	s := step{pose: v, neighbours: o.ids.take(len(neighbours)), merged: o.ids.take(len(merged)), into: holder}
	copy(s.neighbours, neighbours)
	copy(s.merged, merged)
	slices.Sort(s.neighbours)
	slices.Sort(s.merged)
	for _, t := range s.merged {
		for _, u := range o.nodes[t] {
			if u != v {
				o.of[u] = without(o.of[u], t)
			}
		}
	}
	o.of[v] = nil
	o.gone[v] = true
	if holder < 0 && len(s.neighbours) > 1 {
		s.into = int32(len(o.nodes))
		o.nodes = append(o.nodes, s.neighbours)
		o.size = append(o.size, o.bytes(s.neighbours))
		o.counted = append(o.counted, 0)
		o.count = append(o.count, 0)
		for _, u := range s.neighbours {
			o.of[u] = append(o.of[u], s.into)
		}
	}
	o.steps = append(o.steps, s)
}

func without(list []int32, t int32) []int32 {
	i := slices.Index(list, t)
	return append(list[:i], list[i+1:]...)
}

// reconsider computes anew the poses whose elimination the step s may have made cheaper: its neighbours; and poses one term further
// away that have all of the new term's poses as neighbours (they would merge it), or have no others (it would hold what
// they leave).
func (o *ordering) reconsider(s *step) {
	for _, u := range s.neighbours {
		o.refresh(u)
	}
	if s.into < 0 {
		return
	}
	const within = -1 << 30
	o.mark++
	for _, u := range s.neighbours {
		o.marked[u], o.hits[u] = o.mark, within
	}
	outside := o.outside[:0]
	for _, u := range s.neighbours {
		o.stamp++
		for _, t := range o.of[u] {
			for _, w := range o.nodes[t] {
				if o.seen[w] == o.stamp {
					continue // counted for u already
				}
				o.seen[w] = o.stamp
				if o.marked[w] != o.mark {
					o.marked[w], o.hits[w] = o.mark, 0
					outside = append(outside, w)
				}
				o.hits[w]++
			}
		}
	}
	o.outside = outside
	for _, w := range outside {
		if int(o.hits[w]) == len(s.neighbours) || o.noneBeyond(w) {
			o.refresh(w)
		}
	}
}

// noneBeyond tells whether all neighbours of w carry the present mark as members of the new term.
func (o *ordering) noneBeyond(w int32) bool {
	for _, t := range o.of[w] {
		for _, u := range o.nodes[t] {
			if u != w && (o.marked[u] != o.mark || o.hits[u] > 0) {
				return false
			}
		}
	}
	return true
}

// refresh enters pose u anew if its elimination has become cheaper. A rise is left to be found when its turn comes.
func (o *ordering) refresh(u int32) {
	if o.separator[u] {
		return
	}
	if _, _, _, delta := o.look(u); delta < o.delta[u] {
		o.delta[u] = delta
		o.queue.push(candidate{delta, u})
	}
}

// parts returns the connected parts of the graph, each ascending, in the order of their first poses.
func (o *ordering) parts() [][]int32 {
	reached := make([]bool, len(o.of))
	walked := make([]bool, len(o.nodes))
	var parts [][]int32
	for v := range o.of {
		if reached[v] {
			continue
		}
		reached[v] = true
		part := []int32{int32(v)}
		for i := 0; i < len(part); i++ {
			for _, t := range o.of[part[i]] {
				if walked[t] {
					continue
				}
				walked[t] = true
				for _, u := range o.nodes[t] {
					if !reached[u] {
						reached[u] = true
						part = append(part, u)
					}
				}
			}
		}
		slices.Sort(part)
		parts = append(parts, part)
	}
	return parts
}
