package sparse

import "fmt"

// Symbolic is the analysed structure of a pattern: elimination order, supernodes
// and the place of every number. It does not change after Analyse.
type Symbolic struct {
	dims    []int32
	pairs   [][2]int32
	offset  []int32 // scalar offset of each block row in the caller's order
	inner   []int32 // the same in elimination order
	order   []int32 // block rows in elimination order
	last    []int32 // block rows forced last
	lastDim int
	flops   float64
	entries int

	diagAt, offAt []int32 // where the blocks of a Matrix lie
	matrixLen     int

	fronts    []front
	children  []int32
	toParent  []run // rows of a front in its parent, see front.up
	toVector  []run // rows of a front in a vector in elimination order
	blocks    []placement
	factorLen int
	stackLen  int
	vectorLen int // all row vectors of a right-hand side
	widest    struct{ k, r int }

	workers int
	tasks   [2][]int32 // fronts of each worker, ascending
	top     []int32    // fronts above those, ascending
}

// front is one supernode: k pivot columns and r rows below, in scalars.
//
// The factor holds, column-major, D (k x k lower triangle, leading dimension ldd)
// and R (r x k, leading dimension ldr); the update U (r x r lower triangle,
// leading dimension ldr) that it passes to its parent lives on a stack.
type front struct {
	k, r      int
	ldd, ldr  int
	d, b, u   int // offsets of D and R in the factor, of U on the stack
	vec       int // offset of its row vector
	pivot     int // first pivot in a vector in elimination order
	parent    int32
	child     [2]int32 // range in children
	up        [2]int32 // range in toParent
	upPivots  int32    // that many of the runs end in the parent's pivots
	gather    [2]int32 // range in toVector
	block     [2]int32 // range in blocks
	half      int      // where two workers cut the pivot columns
	halfBlock int32    // and the blocks
	shared    bool     // worth two workers
}

// run maps length consecutive scalars.
type run struct{ src, dst, length int32 }

// placement says where a block of the matrix goes in the factor.
type placement struct {
	src, dst   int
	ld         int32
	rows, cols int8 // of the source block, row-major
	transposed bool // the block's rows are columns of the factor
}

// Analyse orders the pattern and fixes the structure of its factor. It is
// deterministic.
func Analyse(p Pattern, o Options) (*Symbolic, error) {
	if o.Workers < 0 || o.Workers > 2 {
		return nil, fmt.Errorf("sparse: %d workers, want 1 or 2", o.Workers)
	}
	g, err := newGraph(p)
	if err != nil {
		return nil, err
	}
	isLast, err := checkLast(len(p.Dims), o)
	if err != nil {
		return nil, err
	}
	if o.Ordering < Auto || o.Ordering > NestedDissection {
		return nil, fmt.Errorf("sparse: unknown ordering %d", o.Ordering)
	}
	nodes := newSupernodes(chooseOrder(g, isLast, o))

	s := &Symbolic{last: append([]int32(nil), o.Last...), pairs: append([][2]int32(nil), p.Pairs...)}
	s.placeMatrix(p)
	s.workers = max(1, o.Workers)
	s.placeFronts(nodes)
	if size := s.factorLen + s.stackLen; size > maxNumbers {
		return nil, fmt.Errorf("sparse: the factor needs %d numbers, more than %d", size, maxNumbers)
	}
	s.placeBlocks(nodes)
	return s, nil
}

// Blocks returns the number of block rows.
func (s *Symbolic) Blocks() int { return len(s.dims) }

// Size returns the number of scalars.
func (s *Symbolic) Size() int { return int(s.offset[len(s.dims)]) }

// Offset returns where block row i starts in a vector.
func (s *Symbolic) Offset(i int) int { return int(s.offset[i]) }

// Flops returns the floating-point operations of one factorisation.
func (s *Symbolic) Flops() float64 { return s.flops }

// Entries returns the numbers stored for L.
func (s *Symbolic) Entries() int { return s.entries }

// isLast reports whether front i is that of the block rows forced last.
func (s *Symbolic) isLast(i int32) bool {
	return len(s.last) > 0 && int(i) == len(s.fronts)-1
}

func up4(n int) int { return (n + 3) &^ 3 }

func (s *Symbolic) placeMatrix(p Pattern) {
	n := len(p.Dims)
	s.dims = make([]int32, n)
	s.offset = make([]int32, n+1)
	s.diagAt = make([]int32, n+1)
	at := int32(0)
	for i, d := range p.Dims {
		s.dims[i] = int32(d)
		s.offset[i+1] = s.offset[i] + int32(d)
		s.diagAt[i] = at
		at += int32(d * d)
	}
	s.diagAt[n] = at
	s.offAt = make([]int32, len(p.Pairs)+1)
	for k, q := range p.Pairs {
		s.offAt[k] = at
		at += s.dims[q[0]] * s.dims[q[1]]
	}
	s.offAt[len(p.Pairs)] = at
	s.matrixLen = int(at)
}

// placeFronts lays out factor, stacks and row vectors.
func (s *Symbolic) placeFronts(t *supernodes) {
	n := len(t.order)
	s.order = t.order
	s.inner = make([]int32, n+1)
	for k, v := range t.order {
		s.inner[k+1] = s.inner[k] + s.dims[v]
	}
	free := n - len(s.last)
	s.lastDim = int(s.inner[n] - s.inner[free])
	if len(s.last) > 0 {
		// Everything forced last is one dense front at the end.
		t.columns = append(t.columns, [2]int32{int32(free), int32(n)})
		t.rows = append(t.rows, [2]int32{})
		for k, r := range t.rows[:t.count] {
			if int(t.parent[k]) == t.count && r[0] == r[1] {
				t.parent[k] = int32(t.count + 1)
			}
		}
		t.count++
		t.parent = append(t.parent, int32(t.count))
	}

	s.fronts = make([]front, t.count)
	s.toVector = make([]run, 0, len(t.rowList)/2)
	for i := range s.fronts {
		f := &s.fronts[i]
		c := t.columns[i]
		f.parent = t.parent[i]
		f.pivot = int(s.inner[c[0]])
		f.k = int(s.inner[c[1]]) - f.pivot
		f.gather[0] = int32(len(s.toVector))
		for _, j := range t.rowList[t.rows[i][0]:t.rows[i][1]] {
			s.toVector = appendRun(s.toVector, int(f.gather[0]), run{int32(f.r), s.inner[j], s.inner[j+1] - s.inner[j]})
			f.r += int(s.inner[j+1] - s.inner[j])
		}
		f.gather[1] = int32(len(s.toVector))
		f.ldd, f.ldr = up4(f.k+3), up4(f.r)
		f.d = s.factorLen
		f.b = f.d + f.ldd*f.k
		s.factorLen = f.b + f.ldr*f.k
		f.vec = s.vectorLen
		s.vectorLen += f.ldr
		s.flops += frontFlops(float64(f.k), float64(f.r))
		s.entries += f.k*(f.k+1)/2 + f.k*f.r
		s.widest.k, s.widest.r = max(s.widest.k, f.k), max(s.widest.r, f.r)
	}
	s.linkChildren()
	s.split()
	s.stack()
	s.mapToParents()
}

// appendRun appends r, or lengthens the last run since the given start.
func appendRun(runs []run, since int, r run) []run {
	if len(runs) > since {
		l := &runs[len(runs)-1]
		if l.src+l.length == r.src && l.dst+l.length == r.dst {
			l.length += r.length
			return runs
		}
	}
	return append(runs, r)
}

func (s *Symbolic) linkChildren() {
	n := len(s.fronts)
	for i := range s.fronts {
		if p := int(s.fronts[i].parent); p < n {
			s.fronts[p].child[1]++
		}
	}
	at := int32(0)
	for i := range s.fronts {
		f := &s.fronts[i]
		size := f.child[1]
		f.child = [2]int32{at, at}
		at += size
	}
	s.children = make([]int32, at)
	for i := range s.fronts {
		if p := int(s.fronts[i].parent); p < n {
			f := &s.fronts[p]
			s.children[f.child[1]] = int32(i)
			f.child[1]++
		}
	}
}

// mapToParents finds, for the rows of each front, their place in its parent:
// first the runs that end in the parent's pivots, then those in its rows.
func (s *Symbolic) mapToParents() {
	s.toParent = make([]run, 0, len(s.toVector))
	for i := range s.fronts {
		f := &s.fronts[i]
		begin := len(s.toParent)
		f.up = [2]int32{int32(begin), int32(begin)}
		if int(f.parent) >= len(s.fronts) {
			continue
		}
		p := &s.fronts[f.parent]
		end := int32(p.pivot + p.k)
		rows := s.toVector[p.gather[0]:p.gather[1]]
		for _, g := range s.toVector[f.gather[0]:f.gather[1]] {
			if cut := min(g.length, end-g.dst); cut > 0 {
				s.toParent = appendRun(s.toParent, begin, run{g.src, g.dst - int32(p.pivot), cut})
				f.upPivots = int32(len(s.toParent) - begin)
				g = run{g.src + cut, g.dst + cut, g.length - cut}
			}
			for g.length > 0 {
				for g.dst >= rows[0].dst+rows[0].length {
					rows = rows[1:]
				}
				cut := min(g.length, rows[0].dst+rows[0].length-g.dst)
				s.toParent = appendRun(s.toParent, begin+int(f.upPivots), run{g.src, rows[0].src + g.dst - rows[0].dst, cut})
				g = run{g.src + cut, g.dst + cut, g.length - cut}
			}
		}
		f.up[1] = int32(len(s.toParent))
	}
}
