package sparse

// eliminateFront assembles and factors front i and forms its update. It reports
// whether all pivots were positive.
func (f *Factor) eliminateFront(i int32, w *worker) bool {
	t := &f.s.fronts[i]
	f.assemble(t, 0, t.k)
	if f.job.carry {
		f.gatherVector(t)
	}
	if f.s.isLast(i) {
		f.keepSchur(t)
		if !f.job.finish {
			return true
		}
	}
	if c := factorPanel(f.val[t.d:], t.ldd, f.val[t.b:], t.ldr, t.k, t.r, f.floor[t.pivot:]); c >= 0 {
		w.failed = t.pivot + c
		return false
	}
	f.update(t, 0, t.r)
	if f.job.carry {
		f.eliminateVector(t, w)
	}
	return true
}

// assemble fills pivot columns from..to-1 of a front: blocks of the matrix, then
// what the children hand over.
func (f *Factor) assemble(t *front, from, to int) {
	clear(f.val[t.d+from*t.ldd : t.d+to*t.ldd])
	clear(f.val[t.b+from*t.ldr : t.b+to*t.ldr])
	blocks := f.s.blocks[t.block[0]:t.block[1]]
	switch {
	case from > 0:
		blocks = blocks[t.halfBlock:]
	case to < t.k:
		blocks = blocks[:t.halfBlock]
	}
	for i := range blocks {
		p := &blocks[i]
		scatter(f.val[p.dst:], int(p.ld), f.job.matrix.data[p.src:], int(p.rows), int(p.cols), p.transposed)
	}
	for _, c := range f.s.children[t.child[0]:t.child[1]] {
		w := &f.s.fronts[c]
		pivots := f.s.toParent[w.up[0] : w.up[0]+w.upPivots]
		rows := f.s.toParent[w.up[0]+w.upPivots : w.up[1]]
		for i, q := range pivots {
			skip, cols := clip(q, from, to)
			if cols <= 0 {
				continue
			}
			u := f.stack[w.u+(int(q.src)+skip)*w.ldr:]
			addRuns(f.val[t.d+(int(q.dst)+skip)*t.ldd:], t.ldd, u, w.ldr, cols, pivots[i:], skip, 1)
			addRuns(f.val[t.b+(int(q.dst)+skip)*t.ldr:], t.ldr, u, w.ldr, cols, rows, 0, 0)
		}
	}
}

// clip cuts a run to destinations from..to-1: it leaves out the first skip and
// keeps count, which may be negative.
func clip(q run, from, to int) (skip, count int) {
	skip = max(0, from-int(q.dst))
	return skip, min(int(q.length), to-int(q.dst)) - skip
}

// update forms columns from..to-1 of the update of a front: its own part, then the
// rest of what the children hand over.
func (f *Factor) update(t *front, from, to int) {
	if from >= to {
		return
	}
	b := f.val[t.b+from:]
	product(f.stack[t.u+from*(t.ldr+1):], t.ldr, b, t.ldr, b, t.ldr, t.r-from, to-from, t.k, true, true)
	for _, c := range f.s.children[t.child[0]:t.child[1]] {
		w := &f.s.fronts[c]
		rows := f.s.toParent[w.up[0]+w.upPivots : w.up[1]]
		for i, q := range rows {
			skip, cols := clip(q, from, to)
			if cols <= 0 {
				continue
			}
			addRuns(f.stack[t.u+(int(q.dst)+skip)*t.ldr:], t.ldr,
				f.stack[w.u+(int(q.src)+skip)*w.ldr:], w.ldr, cols, rows[i:], skip, 1)
		}
	}
}

// scatter copies a block to its place in the factor.
func scatter(dst []float64, ld int, src []float64, rows, cols int, transposed bool) {
	if rows == 3 && cols == 3 {
		s := (*[9]float64)(src)
		d0, d1, d2 := (*[3]float64)(dst), (*[3]float64)(dst[ld:]), (*[3]float64)(dst[2*ld:])
		if transposed {
			d0[0], d0[1], d0[2] = s[0], s[1], s[2]
			d1[0], d1[1], d1[2] = s[3], s[4], s[5]
			d2[0], d2[1], d2[2] = s[6], s[7], s[8]
		} else {
			d0[0], d0[1], d0[2] = s[0], s[3], s[6]
			d1[0], d1[1], d1[2] = s[1], s[4], s[7]
			d2[0], d2[1], d2[2] = s[2], s[5], s[8]
		}
		return
	}
	if rows == 6 && cols == 6 {
		for c := range 6 {
			d := (*[6]float64)(dst[c*ld:])
			if transposed {
				*d = *(*[6]float64)(src[6*c:])
			} else {
				s := (*[31]float64)(src[c:])
				d[0], d[1], d[2], d[3], d[4], d[5] = s[0], s[6], s[12], s[18], s[24], s[30]
			}
		}
		return
	}
	for r := range rows {
		for c, v := range src[r*cols : (r+1)*cols] {
			if transposed {
				dst[c+r*ld] = v
			} else {
				dst[r+c*ld] = v
			}
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
	copy(f.reduced, f.x[t.pivot:t.pivot+n])
}
