package audit

import (
	"cmp"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/posegraph"
	"selvage/internal/sparse"
)

// followed bounds the numbers that exact shifts are computed from: vectors times their length. All ties of an ordinary survey fit, of
// 100 000 keyframes in space the worst 250.
const followed = 0.9e9

// effects computes how far an undetected error of the detectable size of each checked tie moves the map: dx = Q J' Omega e, exact
// for the ties for which it may be worst, and for the others a bound. No pose moves by more of its standard deviation than
// [reliability.Figures.Effect] says, so the shift stays below that times the largest standard deviation of the island.
func (w *work) effects() error {
	largest := w.largestSigmas()
	var jobs []*Tie
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if !t.held || t.T == nil {
			continue
		}
		island := w.p.Island[t.i]
		t.Shift = &Shift{M: t.effect * largest[island], Component: t.Parts[t.component], Gauge: w.out.Islands[island].Gauge}
		jobs = append(jobs, t)
	}
	slices.SortStableFunc(jobs, func(a, b *Tie) int { return cmp.Compare(b.Shift.M, a.Shift.M) })
	scalars := w.sigma.Scalars()
	exact := min(len(jobs), int(followed)/max(1, scalars*w.d))
	c := w.newComparison(jobs)
	for first := 0; first < exact; {
		if err := w.ctx.Err(); err != nil {
			return err
		}
		last, columns := first, 0
		for last < exact && columns+len(jobs[last].Parts) <= sparse.Together {
			columns += len(jobs[last].Parts)
			last++
		}
		w.follow(jobs[first:last], c)
		column := 0
		for k := first; k < last; k++ {
			c.compare(k, column)
			column += len(jobs[k].Parts)
		}
		first = last
	}
	c.list(w)
	w.out.compared = exact == len(jobs)
	return nil
}

// follow computes the exact shifts of some ties, of no more than [sparse.Together] components in all, and what the ends of ties move by
// for the comparison.
func (w *work) follow(batch []*Tie, c *comparison) {
	var loads []posegraph.Load
	columns := 0
	for _, t := range batch {
		loads = w.load(t, columns, loads)
		columns += len(t.Parts)
	}
	most, at := make([]float64, columns), make([]int32, columns)
	turns, keyframes := w.turns(), int32(len(w.p.Keys))
	sums := make([]float64, columns)
	w.sigma.Respond(columns, loads, func(v int32, x []float64) {
		c.keep(v, x)
		if v >= keyframes {
			return
		}
		clear(sums)
		for a := range turns {
			for k, y := range x[a*sparse.Together : a*sparse.Together+columns] {
				sums[k] += y * y
			}
		}
		for k, sum := range sums {
			if sum > most[k] || sum == most[k] && v < at[k] {
				most[k], at[k] = sum, v
			}
		}
	})
	column := 0
	for _, t := range batch {
		t.Shift.M, t.Shift.Exact, t.Shift.Component, t.Shift.At = 0, true, "", nil
		for part := range t.Parts {
			if m := math.Sqrt(most[column]); m > t.Shift.M && !math.IsNaN(float64(t.Detectable[part])) {
				k := keyframe(w.p.Keys[at[column]])
				t.Shift.M, t.Shift.Component, t.Shift.At = m, t.Parts[part], &k
			}
			column++
		}
	}
}

// load appends J' Omega e_c times the detectable error of each component c, from a column on; times one where there is none.
func (w *work) load(t *Tie, column int, loads []posegraph.Load) []posegraph.Load {
	d, info := w.derivative(t.m), w.info(t.m)
	n := d.rows
	for c, size := range t.Detectable {
		x := float64(size)
		if math.IsNaN(x) { // nothing checks it: for the correlations alone
			x = 1
		}
		for e, j := range d.by {
			width := len(j) / n
			for a := range width {
				value := 0.0
				for r := range n {
					value += j[r*width+a] * info[r*n+c] * x
				}
				loads = append(loads, posegraph.Load{Variable: d.at[e], Scalar: a, Column: column + c, Value: value})
			}
		}
	}
	return loads
}

// largestSigmas returns, for each island, the largest standard deviation of a position in any direction.
func (w *work) largestSigmas() []float64 {
	out := make([]float64, w.p.Islands) // squared
	n := w.turns()
	for v := range w.p.Keys {
		if w.sigma.Scalars() == 0 {
			break
		}
		c := w.sigma.Of(int32(v))
		if c == nil {
			continue
		}
		trace := 0.0
		for i := range n {
			trace += c[i*(w.d+1)]
		}
		island := w.p.Island[v]
		if trace <= out[island] {
			continue
		}
		m := mat.NewSymDense(n, nil)
		for i := range n {
			for j := i; j < n; j++ {
				m.SetSym(i, j, c[i*w.d+j])
			}
		}
		var eigen mat.EigenSym
		if !eigen.Factorize(m, false) {
			panic("audit: a covariance that is not finite")
		}
		out[island] = max(out[island], eigen.Values(nil)[n-1])
	}
	for i := range out {
		out[i] = math.Sqrt(out[i])
	}
	return out
}
