package sparse

// gatherVector adds what the children hand over to the pivots of the right-hand
// side.
func (f *Factor) gatherVector(t *front) {
	x := f.x[t.pivot:]
	for _, c := range f.s.children[t.child[0]:t.child[1]] {
		w := &f.s.fronts[c]
		addVector(x, f.vec[w.vec:], f.s.toParent[w.up[0]:w.up[0]+w.upPivots])
	}
}

// eliminateVector solves for the pivots of the right-hand side and forms what the
// front hands to its parent.
func (f *Factor) eliminateVector(t *front, w *worker) {
	x := f.x[t.pivot : t.pivot+t.k]
	copy(w.pivots, x)
	solvePivots(f.val[t.d:], t.ldd, w.pivots, t.k)
	copy(x, w.pivots)
	u := f.vec[t.vec : t.vec+t.ldr]
	clear(u)
	subtractProduct(u, f.val[t.b:], t.ldr, w.pivots, t.r, t.k)
	for _, c := range f.s.children[t.child[0]:t.child[1]] {
		w := &f.s.fronts[c]
		addVector(u, f.vec[w.vec:], f.s.toParent[w.up[0]+w.upPivots:w.up[1]])
	}
}

// backwardFront sets the pivots of the vector to L^-T (x - R' rows).
func (f *Factor) backwardFront(t *front, w *worker) {
	x := f.x[t.pivot : t.pivot+t.k]
	copy(w.pivots, x)
	for _, g := range f.s.toVector[t.gather[0]:t.gather[1]] {
		copy(w.rows[g.src:g.src+g.length], f.x[g.dst:])
	}
	subtractTransposed(w.pivots, f.val[t.b:], t.ldr, w.rows, t.r, t.k)
	solvePivotsTransposed(f.val[t.d:], t.ldd, w.pivots, t.k)
	copy(x, w.pivots)
}

func addVector(dst, src []float64, runs []run) {
	for _, r := range runs {
		from := src[r.src : r.src+r.length]
		to := dst[r.dst:][:len(from)]
		for i, v := range from {
			to[i] += v
		}
	}
}
