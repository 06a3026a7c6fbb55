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

// A pivot below this share of the diagonal entry that it comes from consists of
// rounding errors and counts as not positive: a singular matrix, such as that of a
// network not tied to any datum, is then refused (unless it is ill-conditioned besides).
const pivotFloor = 64 * 0x1p-52

func (e *NotPositiveError) Error() string {
	return fmt.Sprintf("sparse: matrix is not positive definite: pivot of block row %d is not positive or lost in rounding", e.Block)
}

// Factor holds L with H = L L', and the memory of the numeric phase.
type Factor struct {
	s       *Symbolic
	val     []float64 // D and R of all fronts
	stack   []float64 // U of the fronts in flight
	vec     []float64 // per front, the part of a right-hand side it hands to its parent
	x       []float64 // a vector in elimination order
	kept    []float64 // x as Reduce left it
	floor   []float64 // smallest pivots allowed, in elimination order
	schur   []float64 // Schur complement of the last ones, both triangles
	reduced []float64 // and its right-hand side
	team    [2]worker
	job     job
	barrier barrier
	many    *many // allocated by the first SolveMany
}

// NewFactor allocates a factor for matrices of s.
func NewFactor(s *Symbolic) *Factor {
	f := &Factor{
		s:       s,
		val:     make([]float64, s.factorLen+8),
		stack:   make([]float64, s.stackLen+8),
		vec:     make([]float64, s.vectorLen+8),
		x:       make([]float64, s.Size()+8),
		kept:    make([]float64, s.Size()),
		floor:   make([]float64, s.Size()),
		schur:   make([]float64, s.lastDim*s.lastDim),
		reduced: make([]float64, s.lastDim),
	}
	f.barrier.both.L = &f.barrier.lock
	for i := range s.workers {
		w := &f.team[i]
		w.id = i
		w.pivots = make([]float64, s.widest.k+8)
		w.rows = make([]float64, s.widest.r+8)
		w.corner = make([]float64, (panelBlock+4)*panelBlock+8)
	}
	return f
}

// Factorise computes the factor of m. When it returns a *NotPositiveError the
// factor holds nothing of use and may be used again with another matrix.
func (f *Factor) Factorise(m *Matrix) error {
	f.begin(m)
	f.run(job{matrix: m, eliminate: true, finish: true})
	return f.failure()
}

// FactoriseSolve computes the factor of m and solves H x = b, carrying the
// right-hand side along with the elimination. b and x are in the caller's order
// and may be the same slice.
func (f *Factor) FactoriseSolve(m *Matrix, b, x []float64) error {
	f.begin(m)
	f.s.checkVector(x)
	f.enter(b)
	f.run(job{matrix: m, eliminate: true, carry: true, finish: true, backward: true})
	if err := f.failure(); err != nil {
		return err
	}
	f.leave(x)
	return nil
}

// Reduce eliminates everything but the last block rows and leaves their Schur
// complement and reduced right-hand side for SchurLast. The Schur complement need
// not be positive definite. b may be nil: the right-hand side is zero then. After
// Reduce only SchurLast and Expand are defined.
func (f *Factor) Reduce(m *Matrix, b []float64) error {
	f.begin(m)
	if b == nil {
		clear(f.x)
	} else {
		f.enter(b)
	}
	f.run(job{matrix: m, eliminate: true, carry: true})
	copy(f.kept, f.x)
	return f.failure()
}

// SchurLast returns the Schur complement of Options.Last, dense, symmetric and in
// the order of Last, and the right-hand side reduced to it. They are those of the
// latest Factorise, FactoriseSolve or Reduce, also of a Factorise that failed in
// one of the last block rows; after Factorise the right-hand side is undefined.
// The slices belong to f.
func (f *Factor) SchurLast() (matrix, rhs []float64) { return f.schur, f.reduced }

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
	f.run(job{backward: true, lastGiven: true})
	f.leave(x)
}

// Solve solves H x = b with the latest factor. b and x may be the same slice.
func (f *Factor) Solve(b, x []float64) {
	f.s.checkVector(x)
	f.enter(b)
	f.run(job{forward: true, backward: true})
	f.leave(x)
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

func (f *Factor) check(m *Matrix) {
	if m.s != f.s {
		panic("sparse: matrix and factor belong to different patterns")
	}
}

// begin prepares the factorisation of m.
func (f *Factor) begin(m *Matrix) {
	f.check(m)
	s := f.s
	for k, i := range s.order {
		d, h := int(s.dims[i]), m.Diag(int(i))
		for a := range d {
			f.floor[int(s.inner[k])+a] = max(0, pivotFloor*h[a*(d+1)])
		}
	}
}

func (s *Symbolic) checkVector(v []float64) {
	if len(v) != s.Size() {
		panic(fmt.Sprintf("sparse: vector of %d scalars, want %d", len(v), s.Size()))
	}
}

// enter copies b to elimination order.
func (f *Factor) enter(b []float64) {
	s := f.s
	s.checkVector(b)
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

// failure returns the error of the latest elimination.
func (f *Factor) failure() error {
	at := f.firstFailure()
	if at == none {
		return nil
	}
	for k, i := range f.s.order {
		if at < int(f.s.inner[k+1]) {
			return &NotPositiveError{Block: int(i)}
		}
	}
	panic("unreachable")
}
