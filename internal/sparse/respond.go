package sparse

// Together is the number of right-hand sides that Respond solves for at most, and the distance between two scalars of what it hands over.
const Together = together

// Load is one entry of a right-hand side.
type Load struct {
	Block, Scalar int // the row: a scalar of a block
	Column        int // the right-hand side, below Together
	Value         float64
}

// Respond solves for count right-hand sides of which only the loads are not zero; of several for one entry the sum counts. The solution is
// handed over block by block from the last that is eliminated to the first, x[a*Together+c] being scalar a of the block for
// right-hand side c, and valid until read returns.
//
// It is SolveMany without the way over zeros: forwards only the fronts on the way from the loads to the root are met, and a solution
// that is read once need not be written out. One worker does it. The first call allocates memory.
func (f *Factor) Respond(count int, loads []Load, read func(block int, x []float64)) {
	if count < 1 || count > together {
		panic("sparse: more right-hand sides than Together")
	}
	s := f.s
	w := &f.team[0]
	w.needInverter(s)
	f.needMany()
	y := f.many
	if y.front == nil {
		y.front, y.row, y.live = make([]int32, len(s.order)), make([]int32, len(s.order)), make([]bool, len(s.fronts))
		i := 0
		for k, b := range s.order {
			for int(s.inner[k]) >= s.fronts[i].pivot+s.fronts[i].k {
				i++
			}
			y.front[b], y.row[b] = int32(i), s.inner[k]
		}
	}
	clear(y.live)
	for _, l := range loads {
		if l.Column < 0 || l.Column >= count || l.Scalar < 0 || l.Scalar >= int(s.dims[l.Block]) {
			panic("sparse: a load outside the right-hand sides")
		}
		for i := int(y.front[l.Block]); i < len(s.fronts) && !y.live[i]; i = int(s.fronts[i].parent) {
			y.live[i] = true
			f.clearPivots(&s.fronts[i])
		}
	}
	for _, l := range loads {
		y.x[(int(y.row[l.Block])+l.Scalar)*together+l.Column] += l.Value
	}
	m := (count + 11) / 12 * 12
	for i := range s.fronts {
		if y.live[i] {
			f.forwardTogether(&s.fronts[i], m)
		}
	}
	k := len(s.order)
	for i := len(s.fronts) - 1; i >= 0; i-- {
		t := &s.fronts[i]
		if !y.live[i] {
			f.clearPivots(t)
		}
		f.backwardTogether(t, m, w.inv)
		for k > 0 && int(s.inner[k-1]) >= t.pivot {
			k--
			read(int(s.order[k]), y.x[int(s.inner[k])*together:int(s.inner[k+1])*together])
		}
	}
}

func (f *Factor) clearPivots(t *front) { clear(f.many.x[t.pivot*together : (t.pivot+t.k)*together]) }
