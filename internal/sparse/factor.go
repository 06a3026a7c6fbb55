package sparse

import (
	"fmt"
	"math"
)

// NotPositiveError says that the matrix is not positive definite.
type NotPositiveError struct {
	// Block is the block row in which the first pivot that is not positive was
	// met, in the caller's numbering. It depends on the elimination order.
	Block int
}

func (e *NotPositiveError) Error() string {
	return fmt.Sprintf("sparse: matrix is not positive definite: pivot of block row %d is not positive", e.Block)
}

// Factor holds L with H = L L', and the memory of the numeric phase.
type Factor struct {
	s      *Symbolic
	val    []float64 // D and R of all fronts
	stack  []float64 // U of the fronts in flight
	vec    []float64 // per front, the part of a right-hand side it hands to its parent
	x      []float64 // a vector in elimination order
	kept   []float64 // x as Reduce left it
	pivots []float64 // the pivots' part of a vector, padded
	rows   []float64 // the rows' part
	schur  []float64 // Schur complement of the last ones, both triangles
	reduce []float64 // and its right-hand side
	inv    *inverter // allocated by the first SelectedInverse
}

// NewFactor allocates a factor for matrices of s.
func NewFactor(s *Symbolic) *Factor {
	return &Factor{
		s:      s,
		val:    make([]float64, s.factorLen+8),
		stack:  make([]float64, s.stackLen+8),
		vec:    make([]float64, s.vectorLen+8),
		x:      make([]float64, s.Size()+8),
		kept:   make([]float64, s.Size()),
		pivots: make([]float64, s.widest.k+8),
		rows:   make([]float64, s.widest.r+8),
		schur:  make([]float64, s.lastDim*s.lastDim),
		reduce: make([]float64, s.lastDim),
	}
}

// Factorise computes the factor of m. When it returns a *NotPositiveError the
// factor holds nothing of use and may be used again with another matrix.
func (f *Factor) Factorise(m *Matrix) error {
	return f.eliminate(m, false, true)
}

// FactoriseSolve computes the factor of m and solves H x = b, carrying the
// right-hand side along with the elimination. b and x are in the caller's order
// and may be the same slice.
func (f *Factor) FactoriseSolve(m *Matrix, b, x []float64) error {
	f.s.checkVector(b)
	f.s.checkVector(x)
	f.enter(b)
	if err := f.eliminate(m, true, true); err != nil {
		return err
	}
	f.backward()
	f.leave(x)
	return nil
}

// Reduce eliminates everything but the last block rows and leaves their Schur
// complement and reduced right-hand side for SchurLast. The Schur complement need
// not be positive definite. b may be nil: the right-hand side is zero then. After
// Reduce only SchurLast and Expand are defined.
func (f *Factor) Reduce(m *Matrix, b []float64) error {
	if b != nil {
		f.s.checkVector(b)
		f.enter(b)
	} else {
		clear(f.x)
	}
	err := f.eliminate(m, true, false)
	copy(f.kept, f.x)
	return err
}

// SchurLast returns the Schur complement of Options.Last, dense, symmetric and in
// the order of Last, and the right-hand side reduced to it. They are those of the
// latest Factorise, FactoriseSolve or Reduce, also of a Factorise that failed in
// one of the last block rows; after Factorise the right-hand side is undefined.
// The slices belong to f.
func (f *Factor) SchurLast() (matrix, rhs []float64) { return f.schur, f.reduce }

// Expand completes x after Reduce: the entries of the last block rows are given,
// the others are set to what minimises 1/2 x'Hx - b'x.
func (f *Factor) Expand(x []float64) {
	s := f.s
	s.checkVector(x)
	copy(f.x, f.kept)
	at := s.Size() - s.lastDim
	for _, i := range s.last {
		at += copy(f.x[at:], x[s.offset[i]:s.offset[i+1]])
	}
	n := len(s.fronts)
	if len(s.last) > 0 {
		n--
	}
	for i := n - 1; i >= 0; i-- {
		f.backwardFront(&s.fronts[i])
	}
	f.leave(x)
}

// Solve solves H x = b with the latest factor. b and x may be the same slice.
func (f *Factor) Solve(b, x []float64) {
	f.s.checkVector(b)
	f.s.checkVector(x)
	f.enter(b)
	for i := range f.s.fronts {
		f.forwardFront(&f.s.fronts[i])
	}
	f.backward()
	f.leave(x)
}

// SolveMany solves for nrhs right-hand sides in place, stored one after another.
func (f *Factor) SolveMany(b []float64, nrhs int) {
	n := f.s.Size()
	for c := range nrhs {
		f.Solve(b[c*n:(c+1)*n], b[c*n:(c+1)*n])
	}
}

// LogDet returns the logarithm of the determinant of H.
func (f *Factor) LogDet() float64 {
	sum := 0.0
	for i := range f.s.fronts {
		t := &f.s.fronts[i]
		for c := range t.k {
			sum -= math.Log(f.val[t.d+c*(t.ldd+1)])
		}
	}
	return 2 * sum
}

func (s *Symbolic) checkVector(v []float64) {
	if len(v) != s.Size() {
		panic(fmt.Sprintf("sparse: vector of %d scalars, want %d", len(v), s.Size()))
	}
}

// enter copies b to elimination order.
func (f *Factor) enter(b []float64) {
	s := f.s
	for k, i := range s.order {
		copy(f.x[s.inner[k]:s.inner[k+1]], b[s.offset[i]:])
	}
}

// leave copies the result to the caller's order.
func (f *Factor) leave(x []float64) {
	s := f.s
	for k, i := range s.order {
		copy(x[s.offset[i]:s.offset[i+1]], f.x[s.inner[k]:])
	}
}

// eliminate factors front after front, with the right-hand side if carry. Without
// finish the front of the last ones is assembled only.
func (f *Factor) eliminate(m *Matrix, carry, finish bool) error {
	if m.s != f.s {
		panic("sparse: matrix and factor belong to different patterns")
	}
	s := f.s
	for i := range s.fronts {
		t := &s.fronts[i]
		last := len(s.last) > 0 && i == len(s.fronts)-1
		f.assemble(t, m)
		if carry {
			f.gatherVector(t)
		}
		if last {
			f.keepSchur(t)
			if !finish {
				return nil
			}
		}
		if c := factorPanel(f.val[t.d:], t.ldd, f.val[t.b:], t.ldr, t.k, t.r); c >= 0 {
			return &NotPositiveError{Block: s.blockOf(t.pivot + c)}
		}
		if t.r > 0 {
			f.update(t)
		}
		if carry {
			f.eliminateVector(t)
		}
	}
	return nil
}

// blockOf finds the block row of a scalar in elimination order.
func (s *Symbolic) blockOf(scalar int) int {
	for k, i := range s.order {
		if scalar < int(s.inner[k+1]) {
			return int(i)
		}
	}
	return -1
}

// assemble fills the pivot columns of a front: blocks of the matrix, then what the
// children hand over.
func (f *Factor) assemble(t *front, m *Matrix) {
	clear(f.val[t.d:t.endOfBlock])
	for _, p := range f.s.blocks[t.block[0]:t.block[1]] {
		scatter(f.val[p.dst:], int(p.ld), m.data[p.src:], int(p.rows), int(p.cols), p.transposed)
	}
	for _, c := range f.s.children[t.child[0]:t.child[1]] {
		w := &f.s.fronts[c]
		up := f.s.toParent[w.up[0]:w.up[1]]
		u := f.stack[w.u:]
		for i, q := range up[:w.upPivots] {
			from := u[int(q.src)*w.ldr:]
			addRuns(f.val[t.d+int(q.dst)*t.ldd:], t.ldd, from, w.ldr, int(q.length), up[i:w.upPivots], true)
			addRuns(f.val[t.b+int(q.dst)*t.ldr:], t.ldr, from, w.ldr, int(q.length), up[w.upPivots:], false)
		}
	}
}

// update forms the update of a front: its own part, then the rest of what the
// children hand over.
func (f *Factor) update(t *front) {
	u := f.stack[t.u:]
	b := f.val[t.b:]
	product(u, t.ldr, b, t.ldr, b, t.ldr, t.r, t.r, t.k, true, true)
	for _, c := range f.s.children[t.child[0]:t.child[1]] {
		w := &f.s.fronts[c]
		up := f.s.toParent[w.up[0]+w.upPivots : w.up[1]]
		for i, q := range up {
			addRuns(u[int(q.dst)*t.ldr:], t.ldr, f.stack[w.u+int(q.src)*w.ldr:], w.ldr, int(q.length), up[i:], true)
		}
	}
}

// scatter copies a block to its place in the factor.
func scatter(dst []float64, ld int, src []float64, rows, cols int, transposed bool) {
	if transposed {
		for r := range rows {
			copy(dst[r*ld:r*ld+cols], src[r*cols:])
		}
		return
	}
	for c := range cols {
		to := dst[c*ld : c*ld+rows]
		for r := range to {
			to[r] = src[r*cols+c]
		}
	}
}

// keepSchur copies the assembled front of the last ones.
func (f *Factor) keepSchur(t *front) {
	n := t.k
	for c := range n {
		col := f.val[t.d+c*t.ldd:]
		for r := c; r < n; r++ {
			f.schur[r*n+c] = col[r]
			f.schur[c*n+r] = col[r]
		}
	}
	copy(f.reduce, f.x[t.pivot:t.pivot+n])
}
