package sparse

// eliminateShared is eliminateFront done by two workers together, to the same
// bits: they cut the numbers between them, never a sum.
func (f *Factor) eliminateShared(i int32, w *worker) bool {
	t := &f.s.fronts[i]
	carry := f.job.carry && w.id == 0
	if w.id == 0 {
		f.assemble(t, 0, t.half)
	} else if t.half < t.k {
		f.assemble(t, t.half, t.k)
	}
	f.meet()
	if carry {
		f.gatherVector(t)
	}
	if f.s.isLast(i) {
		if w.id == 0 {
			f.keepSchur(t)
		}
		f.meet()
		if !f.job.finish {
			return true
		}
	}
	if c := f.factorShared(t, w); c >= 0 {
		if w.id == 0 {
			w.failed = t.pivot + c
		}
		return false
	}
	if cut := equalArea(t.r); w.id == 0 {
		f.update(t, 0, cut)
	} else {
		f.update(t, cut, t.r)
	}
	if carry {
		f.eliminateVector(t, w)
	}
	return true
}

// equalArea returns the column, a multiple of twelve, that halves the lower
// triangle of an n x n matrix.
func equalArea(n int) int { return int(float64(n)*0.293) / 12 * 12 }

// part returns the half of n rows that worker w takes; the cut is a multiple of
// twelve, so that no tile crosses it.
func (w *worker) part(n int) (from, count int) {
	cut := (n + 12) / 24 * 12
	if w.id == 0 {
		return 0, cut
	}
	return cut, n - cut
}

// factorShared is factorPanel done by two workers.
func (f *Factor) factorShared(t *front, w *worker) int {
	d, r := f.val[t.d:], f.val[t.b:]
	for at := 0; at < t.k; at += panelBlock {
		n := min(panelBlock, t.k-at)
		below := t.k - at - n
		corner := d[at+at*t.ldd:]
		// Both factor the diagonal block, each in memory of its own.
		const ld = panelBlock + 4
		for c := range n {
			copy(w.corner[c*ld+c:c*ld+n], corner[c*t.ldd+c:c*t.ldd+n])
		}
		if c := factorColumns(w.corner, ld, nil, 0, n, n, 0, f.floor[t.pivot+at:]); c >= 0 {
			f.meet()
			return at + c
		}
		left := corner[n:]
		dFrom, dRows := w.part(below)
		rFrom, rRows := w.part(t.r)
		for j := 0; j < n; j += 6 {
			var l triangle
			width := min(6, n-j)
			packTriangle(w.corner[j*(ld+1):], ld, width, &l)
			if dRows > 0 {
				solvePanel(left[dFrom:], t.ldd, w.corner[j:], ld, &l, dRows, j, width)
			}
			if rRows > 0 {
				solvePanel(r[rFrom+at*t.ldr:], t.ldr, w.corner[j:], ld, &l, rRows, j, width)
			}
		}
		f.meet()
		if w.id == 0 {
			for c := range n {
				copy(corner[c*t.ldd+c:c*t.ldd+n], w.corner[c*ld+c:])
			}
		}
		if below > 0 {
			from, to := 0, equalArea(below)
			if w.id > 0 {
				from, to = to, below
			}
			if from < to {
				product(left[from+(n+from)*t.ldd:], t.ldd, left[from:], t.ldd, left[from:], t.ldd, below-from, to-from, n, false, true)
			}
			if rRows > 0 {
				product(r[rFrom+(at+n)*t.ldr:], t.ldr, r[rFrom+at*t.ldr:], t.ldr, left, t.ldd, rRows, below, n, false, false)
			}
		}
		f.meet()
	}
	return -1
}
