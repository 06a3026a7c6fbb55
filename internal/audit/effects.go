package audit

import (
	"cmp"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"
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
	shadows := w.shadows(jobs)
	near := nearSets{g: newGroups(len(jobs)), least: map[int32]float64{}}
	const together = 8 // ties
	vectors := make([]float64, min(together, max(exact, 1))*w.d*scalars)
	for first := 0; first < exact; first += together {
		if err := w.ctx.Err(); err != nil {
			return err
		}
		batch := jobs[first:min(first+together, exact)]
		columns := vectors[:len(batch)*w.d*scalars]
		clear(columns)
		for i, t := range batch {
			w.load(t, columns[i*w.d*scalars:], scalars)
		}
		w.sigma.Apply(columns, len(batch)*w.d)
		for i, t := range batch {
			w.worst(t, columns[i*w.d*scalars:], scalars)
			w.nearBy(shadows, first+i, columns[i*w.d*scalars:], scalars, near.join)
		}
	}
	near.list(w, jobs)
	w.out.compared = exact == len(jobs)
	return nil
}

// load writes J' Omega e_c times the detectable error of component c to vector c; times one where there is none.
func (w *work) load(t *Tie, vectors []float64, scalars int) {
	d, info := w.derivative(t.m), w.info(t.m)
	n := d.rows
	m := make([]float64, n*n)
	for c, x := range t.Detectable {
		if math.IsNaN(float64(x)) { // nothing checks it: for the correlations alone
			x = 1
		}
		for r := range n {
			m[r*n+c] = info[r*n+c] * float64(x)
		}
	}
	d.scatter(w.sigma, m, n, vectors, scalars)
}

// worst reads the largest shift of a position from the vectors of a tie.
func (w *work) worst(t *Tie, vectors []float64, scalars int) {
	most, at, component := 0.0, int32(-1), 0
	for c := range t.Parts {
		if math.IsNaN(float64(t.Detectable[c])) {
			continue
		}
		v := vectors[c*scalars : (c+1)*scalars]
		for k := range w.p.Keys {
			o := w.sigma.Offset(int32(k))
			if o < 0 {
				continue
			}
			sum := 0.0
			for _, x := range v[o : o+w.turns()] {
				sum += x * x
			}
			if sum > most {
				most, at, component = sum, int32(k), c
			}
		}
	}
	t.Shift.M, t.Shift.Exact = math.Sqrt(most), true
	t.Shift.Component, t.Shift.At = "", nil
	if at >= 0 {
		k := keyframe(w.p.Keys[at])
		t.Shift.Component, t.Shift.At = t.Parts[component], &k
	}
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
