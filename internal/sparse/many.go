package sparse

// together is the number of right-hand sides that SolveMany takes through the
// factor at a time; a multiple of twelve suits all kernels.
const together = 48

// many is the memory of SolveMany. x holds a block of right-hand sides with those of
// one scalar side by side: the rows of the kernels are right-hand sides.
type many struct {
	x, pivots []float64

	// Of Respond: front and first row of each block, and the fronts that right-hand sides meet.
	front, row []int32
	live       []bool
}

// SolveMany solves for nrhs right-hand sides in place, stored one after another. One
// worker does it. The first call allocates memory.
func (f *Factor) SolveMany(b []float64, nrhs int) {
	n := f.s.Size()
	if len(b) != n*nrhs {
		panic("sparse: the right-hand sides have the wrong length")
	}
	w := &f.team[0]
	w.needInverter(f.s)
	f.needMany()
	for ; nrhs > 0; nrhs -= together {
		count := min(nrhs, together)
		f.solveTogether(b[:n*count], count, w.inv)
		b = b[n*count:]
	}
}

func (f *Factor) needMany() {
	if f.many == nil {
		f.many = &many{
			x:      make([]float64, together*f.s.Size()+8),
			pivots: make([]float64, together*f.s.widest.k+8),
		}
	}
}

func (f *Factor) solveTogether(b []float64, count int, v *inverter) {
	s, x := f.s, f.many.x
	n, m := s.Size(), (count+11)/12*12
	clear(x)
	for k, i := range s.order {
		for a := range int(s.dims[i]) {
			for c := range count {
				x[(int(s.inner[k])+a)*together+c] = b[c*n+int(s.offset[i])+a]
			}
		}
	}
	for i := range s.fronts {
		f.forwardTogether(&s.fronts[i], m)
	}
	for i := len(s.fronts) - 1; i >= 0; i-- {
		f.backwardTogether(&s.fronts[i], m, v)
	}
	for k, i := range s.order {
		for a := range int(s.dims[i]) {
			for c := range count {
				b[c*n+int(s.offset[i])+a] = x[(int(s.inner[k])+a)*together+c]
			}
		}
	}
}

// forwardTogether sets the pivots to X D^-T and takes X R' from the rows.
func (f *Factor) forwardTogether(t *front, m int) {
	x, d := f.many.x[t.pivot*together:], f.val[t.d:]
	for j := 0; j < t.k; j += 6 {
		n := min(6, t.k-j)
		var l triangle
		packTriangle(d[j+j*t.ldd:], t.ldd, n, &l)
		solvePanel(x, together, d[j:], t.ldd, &l, m, j, n)
	}
	for _, g := range f.s.toVector[t.gather[0]:t.gather[1]] {
		product(f.many.x[int(g.dst)*together:], together, x, together,
			f.val[t.b+int(g.src):], t.ldr, m, int(g.length), t.k, false, false)
	}
}

// backwardTogether sets the pivots to (X - rows R) D^-1.
func (f *Factor) backwardTogether(t *front, m int, v *inverter) {
	x, r := f.many.x[t.pivot*together:], f.val[t.b:]
	f.invertPivots(t, v)
	for c := range t.k {
		for i, value := range r[c*t.ldr : c*t.ldr+t.r] {
			v.coupling[c+i*v.ld] = value
		}
	}
	for _, g := range f.s.toVector[t.gather[0]:t.gather[1]] {
		product(x, together, f.many.x[int(g.dst)*together:], together,
			v.coupling[int(g.src)*v.ld:], v.ld, m, t.k, int(g.length), false, false)
	}
	negative := f.many.pivots[:t.k*together]
	for i := range negative {
		negative[i] = -x[i]
	}
	product(x, together, negative, together, v.a, v.ld, m, t.k, t.k, true, false)
}
