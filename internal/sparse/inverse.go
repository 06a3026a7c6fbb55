package sparse

// inverter is the memory of the selected inverse, for the widest front.
type inverter struct {
	ld             int       // leading dimension of all four, as the front at hand has it
	a, own         []float64 // k x k
	coupling, next []float64 // k x r
}

// SelectedInverse sets out to the blocks of the inverse of H on the pattern of H:
// the covariances of poses and of pairs of poses that share a factor. out must
// belong to the same Symbolic. The first call allocates memory.
//
// Takahashi, Fagan, Chen (1973), front by front from the root. With D, R the
// factor of a front, Y = R D^-1 and Z the inverse, which is known for the rows r
// when a front is reached,
//
//	Z_sr = -Y' Z_rr,   Z_ss = D^-T D^-1 - Z_sr Y.
func (f *Factor) SelectedInverse(out *Matrix) {
	f.check(out)
	for i := range f.s.workers {
		f.team[i].needInverter(f.s)
	}
	f.run(job{inverse: out})
}

func (w *worker) needInverter(s *Symbolic) {
	if w.inv != nil {
		return
	}
	k, r := s.widest.k, s.widest.r
	ld := up4(k + 3)
	w.inv = &inverter{
		a: make([]float64, ld*k+8), own: make([]float64, ld*k+8),
		coupling: make([]float64, ld*r+8), next: make([]float64, ld*r+8),
	}
}

func (f *Factor) invert(fronts []int32, w *worker) {
	for k := len(fronts) - 1; k >= 0; k-- {
		t := &f.s.fronts[fronts[k]]
		f.invertFront(t, w.inv)
		f.writeInverse(t, w.inv)
		for _, c := range f.s.children[t.child[0]:t.child[1]] {
			f.handDown(t, &f.s.fronts[c], w.inv)
		}
	}
}

// invertPivots computes a = D^-T, an upper triangle.
func (f *Factor) invertPivots(t *front, v *inverter) {
	ld := up4(t.k + 3)
	v.ld = ld
	d := f.val[t.d:]
	clear(v.a[:ld*t.k+8])
	for c := range t.k {
		v.a[c*(ld+1)] = 1
	}
	// From I D^-T, column group by column group.
	for j := 0; j < t.k; j += 6 {
		n := min(6, t.k-j)
		var l triangle
		packTriangle(d[j+j*t.ldd:], t.ldd, n, &l)
		solvePanel(v.a, ld, d[j:], t.ldd, &l, j+n, j, n)
	}
}

// invertFront computes Z_ss (own) and Z_sr (next). Z_rr, both triangles, lies
// where the update of the front was.
func (f *Factor) invertFront(t *front, v *inverter) {
	f.invertPivots(t, v)
	ld := v.ld
	product(v.own, ld, v.a, ld, v.a, ld, t.k, t.k, t.k, true, true) // -D^-T D^-1
	if t.r > 0 {
		product(v.coupling, ld, v.a, ld, f.val[t.b:], t.ldr, t.k, t.r, t.k, true, false) // -Y'
		product(v.next, ld, v.coupling, ld, f.stack[t.u:], t.ldr, t.k, t.r, t.r, true, false)
		for c := range t.r {
			col := v.next[c*ld : c*ld+t.k]
			for i := range col {
				col[i] = -col[i]
			}
		}
		product(v.own, ld, v.next, ld, v.coupling, ld, t.k, t.k, t.r, false, true)
	}
	for c := range t.k {
		v.own[c*(ld+1)] = -v.own[c*(ld+1)]
		for i := c + 1; i < t.k; i++ {
			x := -v.own[i+c*ld]
			v.own[i+c*ld], v.own[c+i*ld] = x, x
		}
	}
}

func packTriangle(d []float64, ldd, n int, l *triangle) {
	t := 0
	for c := range n {
		t += copy(l[t:], d[c*ldd+c:c*ldd+n])
	}
}

// writeInverse copies the blocks of the pattern that the factor keeps in front t.
func (f *Factor) writeInverse(t *front, v *inverter) {
	out := f.job.inverse
	for _, p := range f.s.blocks[t.block[0]:t.block[1]] {
		dst := out.data[p.src:]
		rows, cols := int(p.rows), int(p.cols)
		// Entry (i, j) of the block is entry at(i, j) of z.
		z, first, byRow, byCol := v.own, 0, 1, v.ld
		if p.dst < t.b {
			first = (p.dst-t.d)%t.ldd + (p.dst-t.d)/t.ldd*v.ld
		} else {
			z, byRow, byCol = v.next, v.ld, 1
			first = (p.dst-t.b)%t.ldr*v.ld + (p.dst-t.b)/t.ldr
		}
		if p.transposed {
			byRow, byCol = byCol, byRow
		}
		for i := range rows {
			for j := range cols {
				dst[i*cols+j] = z[first+i*byRow+j*byCol]
			}
		}
	}
}

// handDown gives child w of front t the inverse on its rows, both triangles. It
// lands where the update of w was; all children are served before any of them is
// worked on, because their own children reuse the memory of t's.
func (f *Factor) handDown(t, w *front, v *inverter) {
	z := f.stack[t.u:]
	to := f.stack[w.u:]
	up := f.s.toParent[w.up[0]:w.up[1]]
	pivots, rows := up[:w.upPivots], up[w.upPivots:]
	for _, q := range pivots {
		for c := range int(q.length) {
			col := to[(int(q.src)+c)*w.ldr:]
			for _, r := range pivots {
				copy(col[r.src:r.src+r.length], v.own[int(r.dst)+(int(q.dst)+c)*v.ld:])
			}
			for _, r := range rows {
				from := v.next[int(q.dst)+c+int(r.dst)*v.ld:]
				for i := range int(r.length) {
					col[int(r.src)+i] = from[i*v.ld]
				}
			}
		}
	}
	for _, q := range rows {
		for c := range int(q.length) {
			col := to[(int(q.src)+c)*w.ldr:]
			for _, r := range pivots {
				copy(col[r.src:r.src+r.length], v.next[int(r.dst)+(int(q.dst)+c)*v.ld:])
			}
			for _, r := range rows {
				copy(col[r.src:r.src+r.length], z[int(r.dst)+(int(q.dst)+c)*t.ldr:])
			}
		}
	}
}
