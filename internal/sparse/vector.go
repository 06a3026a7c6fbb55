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
func (f *Factor) eliminateVector(t *front) {
	v := f.pivots[:t.k]
	x := f.x[t.pivot : t.pivot+t.k]
	copy(v, x)
	solvePivots(f.val[t.d:], t.ldd, f.pivots, t.k)
	copy(x, v)
	if t.r == 0 {
		return
	}
	u := f.vec[t.vec : t.vec+t.ldr]
	clear(u)
	subtractProduct(u, f.val[t.b:], t.ldr, f.pivots, t.r, t.k)
	for _, c := range f.s.children[t.child[0]:t.child[1]] {
		w := &f.s.fronts[c]
		addVector(u, f.vec[w.vec:], f.s.toParent[w.up[0]+w.upPivots:w.up[1]])
	}
}

func (f *Factor) forwardFront(t *front) {
	f.gatherVector(t)
	f.eliminateVector(t)
}

func (f *Factor) backward() {
	for i := len(f.s.fronts) - 1; i >= 0; i-- {
		f.backwardFront(&f.s.fronts[i])
	}
}

// backwardFront sets the pivots x = L^-T (x - R' rows).
func (f *Factor) backwardFront(t *front) {
	x := f.x[t.pivot : t.pivot+t.k]
	v := f.pivots[:t.k]
	copy(v, x)
	if t.r > 0 {
		for _, g := range f.s.toVector[t.gather[0]:t.gather[1]] {
			copy(f.rows[g.src:g.src+g.length], f.x[g.dst:])
		}
		clear(f.rows[t.r : t.r+4])
		subtractTransposed(f.pivots, f.val[t.b:], t.ldr, f.rows, t.r, t.k)
	}
	solvePivotsTransposed(f.val[t.d:], t.ldd, f.pivots, t.k)
	copy(x, v)
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
