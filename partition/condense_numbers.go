package partition

import "fmt"

// term is one quadratic term during elimination. Of h only the lower triangle of D x D blocks in the order of nodes is used.
type term struct {
	nodes []int32
	h, b  []float64
	scale float64 // the largest number that it came from by subtraction: its rounding is to be judged by that
}

// at returns entry i, j of the symmetric matrix.
func (t *term) at(d, i, j int) float64 {
	if i < j {
		i, j = j, i
	}
	return t.h[i*d*len(t.nodes)+j]
}

// elimination keeps what the step of an eliminated pose is computed from. With H_vv = L L' it is
// d_v = -L^-T (z + sum_u Y_u' d_u).
type elimination struct {
	pose  int32
	nodes []int32
	l     []float64 // D x D, lower, the diagonal inverted
	z     []float64 // L^-1 b_v
	y     []float64 // rows of H_uv L^-T, D for each of nodes
}

// eliminator carries out the steps of an ordering on the numbers.
type eliminator struct {
	d int
	layout
	plan  *ordering
	terms []term // h is nil when merged or not yet made
	owned []bool // h and b are ours, not the caller's
	pos   []int32
	steps []elimination
	kept  arena[float64]
	pool  [][][]float64 // free buffers by number of poses: h, then b
	full  []float64     // diagonal of a sum before elimination
}

// ofPivot is the position of the pose being eliminated.
const ofPivot = -1

func newEliminator(plan *ordering, at layout, factors []Quadratic) *eliminator {
	e := &eliminator{
		d:      at.dim,
		layout: at,
		plan:   plan,
		terms:  make([]term, len(plan.nodes)),
		owned:  make([]bool, len(plan.nodes)),
		pos:    make([]int32, len(plan.of)),
		steps:  make([]elimination, 0, len(plan.steps)),
	}
	for i := range factors {
		if len(factors[i].Nodes) > 1 {
			e.terms[i] = term{nodes: factors[i].Nodes, h: factors[i].H, b: factors[i].B}
		}
	}
	for _, a := range plan.absorbed {
		e.own(a.into)
		e.addInto(a.into, e.terms[a.from])
		e.terms[a.from] = term{}
	}
	return e
}

func (e *eliminator) run() error {
	for i := range e.plan.steps {
		if err := e.eliminate(&e.plan.steps[i]); err != nil {
			return err
		}
	}
	return nil
}

// eliminate adds up the merged terms, H over pivot and neighbours, and forms H_nn - H_nv H_vv^-1 H_vn.
func (e *eliminator) eliminate(s *step) error {
	d, k := e.d, len(s.neighbours)
	out := e.kept.take(d*d + d + k*d*d)
	x := elimination{pose: s.pose, nodes: s.neighbours, l: out[:d*d], z: out[d*d:][:d], y: out[d*d+d:]}
	e.pos[s.pose] = ofPivot
	var sum term
	whole := e.wholeOf(s) // its sum begins as a copy: late in a large graph most steps only shrink one large term
	if whole >= 0 {
		sum = e.shrink(&e.terms[whole], &x)
		e.release(whole)
	} else {
		sum = e.buffer(s.neighbours)
	}
	e.place(&sum)
	for _, t := range s.merged {
		if t != whole {
			e.gather(&e.terms[t], &sum, &x)
			e.release(t)
		}
	}
	if !factorPivot(d, x.l) {
		return fmt.Errorf("partition: pose %d is not determined by its measurements", s.pose)
	}
	solveRows(d, x.l, x.y)
	solveRows(d, x.l, x.z)
	e.full = e.full[:0]
	for i := 0; i < d*k; i++ {
		v := sum.h[i*(d*k+1)]
		e.full = append(e.full, v)
		sum.scale = max(sum.scale, v)
	}
	subtractOuter(d, k, sum.h, x.y)
	if e.known() {
		e.mend(&sum)
	}
	for i := range sum.b {
		row := x.y[i*d:][:d]
		for j, z := range x.z {
			sum.b[i] -= row[j] * z
		}
	}
	switch {
	case s.into < 0:
		e.recycle(sum)
	case e.terms[s.into].h == nil:
		e.terms[s.into], e.owned[s.into] = sum, true
	default:
		e.own(s.into)
		e.addInto(s.into, sum)
		e.recycle(sum)
	}
	e.steps = append(e.steps, x)
	return nil
}

// lost is the share of a diagonal entry below which the rest of a subtraction is thought to have lost too many digits.
const lost = 1e-3

// mend restores the diagonal blocks of a sum that the subtraction has left small against what they were, and so full of rounding:
// H N = 0 gives them from the other blocks of their rows, H_kk = -sum_j H_kj Ad(X_j^-1 X_k), which did not suffer. The idea is that
// of Grassmann, Taksar and Heyman, "Regenerative analysis and steady state distributions for Markov chains", Operations
// Research 33(5), 1985.
func (e *eliminator) mend(sum *term) {
	d := e.d
	m := d * len(sum.nodes)
	if m == d {
		return // nothing remains of it
	}
	for k, u := range sum.nodes {
		worn := false
		for i := k * d; i < (k+1)*d; i++ {
			worn = worn || sum.h[i*(m+1)] < lost*e.full[i]
		}
		if !worn {
			continue
		}
		if int(u) >= e.count {
			e.mendPoint(sum, k)
			continue
		}
		var block, ad [36]float64
		for j, w := range sum.nodes {
			if j == k {
				continue
			}
			e.motion(w, u, ad[:d*d])
			for r := 0; r < d; r++ {
				for s := 0; s < d; s++ {
					h := sum.at(d, k*d+r, j*d+s)
					for c := 0; c < d; c++ {
						block[r*d+c] -= h * ad[s*d+c]
					}
				}
			}
		}
		for r := 0; r < d; r++ {
			for c := 0; c < d; c++ {
				sum.h[(k*d+r)*m+k*d+c] = (block[r*d+c] + block[c*d+r]) / 2
			}
		}
	}
}

// wholeOf returns a merged term over the pivot and all its neighbours, in ascending order, or -1.
func (e *eliminator) wholeOf(s *step) int32 {
	for _, t := range s.merged {
		if e.owned[t] && len(e.terms[t].nodes) == len(s.neighbours)+1 {
			return t
		}
	}
	return -1
}

// shrink returns a copy of t over x.nodes, all its poses but the pivot, and takes H_vv, H_nv and b_v from it.
func (e *eliminator) shrink(t *term, x *elimination) term {
	d := e.d
	m := d * len(x.nodes)
	wide := m + d
	p := 0
	for t.nodes[p] != x.pose {
		p++
	}
	p *= d // the pivot's first row
	sum := e.dirty(x.nodes)
	sum.scale = t.scale
	copy(sum.b, t.b[:p])
	copy(sum.b[p:], t.b[p+d:])
	copy(x.z, t.b[p:p+d])
	for i := 0; i < p; i++ {
		copy(sum.h[i*m:][:(i/d+1)*d], t.h[i*wide:])
	}
	for i := 0; i < d; i++ {
		row := t.h[(p+i)*wide:][:p+d]
		for j, v := range row[:p] { // H_nv is H_vn transposed
			x.y[j*d+i] = v
		}
		copy(x.l[i*d:][:d], row[p:])
	}
	for i := p; i < m; i++ {
		row := t.h[(i+d)*wide:][:(i/d+2)*d]
		copy(sum.h[i*m:], row[:p])
		copy(x.y[i*d:][:d], row[p:])
		copy(sum.h[i*m+p:], row[p+d:])
	}
	return sum
}

// gather adds term t to the sum over the neighbours, to H_vv (in x.l), H_nv (in x.y) and b_v (in x.z).
func (e *eliminator) gather(t, sum *term, x *elimination) {
	d := e.d
	stride, wide := d*len(t.nodes), d*len(sum.nodes)
	sum.scale = max(sum.scale, t.scale)
	for a, u := range t.nodes {
		pa := int(e.pos[u])
		if pa == ofPivot {
			add(x.z, t.b[a*d:][:d])
		} else {
			add(sum.b[pa*d:][:d], t.b[a*d:][:d])
		}
		for b := 0; b <= a; b++ {
			pb := int(e.pos[t.nodes[b]])
			block := t.h[a*d*stride+b*d:]
			switch {
			case pa == ofPivot && pb == ofPivot:
				addBlock(d, x.l, d, block, stride)
			case pa == ofPivot:
				addTransposed(d, x.y[pb*d*d:], d, block, stride)
			case pb == ofPivot:
				addBlock(d, x.y[pa*d*d:], d, block, stride)
			case pa >= pb:
				addBlock(d, sum.h[pa*d*wide+pb*d:], wide, block, stride)
			default:
				addTransposed(d, sum.h[pb*d*wide+pa*d:], wide, block, stride)
			}
		}
	}
}

// addInto adds a term to another that holds all its poses.
func (e *eliminator) addInto(into int32, t term) {
	dst := &e.terms[into]
	e.place(dst)
	e.gather(&t, dst, nil)
}

// place lets gather add to the poses of t.
func (e *eliminator) place(t *term) {
	for i, u := range t.nodes {
		e.pos[u] = int32(i)
	}
}

// own makes sure that a term has numbers of its own, with its poses ascending.
func (e *eliminator) own(i int32) {
	if e.owned[i] {
		return
	}
	t := e.buffer(e.plan.nodes[i])
	e.place(&t)
	e.gather(&e.terms[i], &t, nil)
	e.terms[i], e.owned[i] = t, true
}

// buffer returns a zero term over nodes.
func (e *eliminator) buffer(nodes []int32) term {
	t := e.dirty(nodes)
	clear(t.h)
	clear(t.b)
	return t
}

// dirty returns a term over nodes with any numbers in it.
func (e *eliminator) dirty(nodes []int32) term {
	k := len(nodes)
	for len(e.pool) <= k {
		e.pool = append(e.pool, nil)
	}
	m := e.d * k
	var x []float64
	if free := e.pool[k]; len(free) > 0 {
		x = free[len(free)-1]
		e.pool[k] = free[:len(free)-1]
	} else {
		x = make([]float64, m*m+m)
	}
	return term{nodes: nodes, h: x[:m*m], b: x[m*m:]}
}

func (e *eliminator) release(i int32) {
	if e.owned[i] {
		e.recycle(e.terms[i])
	}
	e.terms[i] = term{}
}

func (e *eliminator) recycle(t term) {
	k := len(t.nodes)
	e.pool[k] = append(e.pool[k], t.h[:cap(t.h)])
}
