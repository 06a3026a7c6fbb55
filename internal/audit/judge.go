package audit

import (
	"cmp"
	"math"
	"slices"

	"selvage/internal/adjust"
	"selvage/internal/posegraph"
	"selvage/internal/reliability"
)

// judged bounds the numbers that exact tests of ties outside the map are computed from, as [followed] does: of 100 000 keyframes in
// space seventy ties.
const judged = 2.5e8

// judge tests the ties that are not held against the map. Their ends share no factor, so what the map predicts for them needs
// solutions of their own. Since the covariance of a difference is at most twice the sum of the covariances, a test with
// that sum is never too strict: where it rejects, and there is no room for the exact one, it is enough.
func (w *work) judge() error {
	scratch := posegraph.New(w.d, w.p.Graph.Values.Poses)
	b := scratch.AddBetween()
	type job struct {
		t *Tie
		k int // in b
	}
	var jobs []job
	d := w.d
	sum, ji, jj := make([]float64, d*d), make([]float64, d*d), make([]float64, d*d)
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if t.held || !t.placed {
			continue
		}
		info, err := w.s.Ties[k].Cov.Information(w.out.Dimension)
		if err != nil {
			return err
		}
		j := job{t, b.Len()}
		b.Add(t.i, t.j, adjust.Pose(w.s.Ties[k].Pose), &info)
		r := b.Residual(j.k, &scratch.Values)
		t.Residual = r[:]
		if d == 3 {
			t.Residual = []float64{r[0], r[1], r[5]}
		}
		m, rad := w.lengths(t.Residual)
		t.ResidualM, t.ResidualRad, t.ApartM, t.ApartRad = &m, &rad, &m, &rad
		b.Jacobians(j.k, &scratch.Values, ji, jj)
		clear(sum)
		w.addForm(sum, ji, t.i)
		w.addForm(sum, jj, t.j)
		w.conclude(t, b.Info(j.k), sum)
		t.AtLeast = true
		jobs = append(jobs, j)
	}
	// Those that the weak test leaves in doubt come first.
	slices.SortStableFunc(jobs, func(x, y job) int { return cmp.Compare(x.t.strength(), y.t.strength()) })
	scalars := w.sigma.Scalars()
	exact := min(len(jobs), int(judged)/max(1, scalars*d))
	const together = 8
	vectors := make([]float64, min(together, max(1, exact))*d*scalars)
	for first := 0; first < exact; first += together {
		if err := w.ctx.Err(); err != nil {
			return err
		}
		batch := jobs[first:min(first+together, exact)]
		columns := vectors[:len(batch)*d*scalars]
		clear(columns)
		for i, j := range batch {
			w.jacobian(b, j.k, &scratch.Values, columns[i*d*scalars:], scalars)
		}
		w.sigma.Apply(columns, len(batch)*d)
		for i, j := range batch {
			p := make([]float64, d*d)
			w.across(b, j.k, &scratch.Values, columns[i*d*scalars:], scalars, p)
			w.conclude(j.t, b.Info(j.k), p)
			j.t.AtLeast = false
		}
	}
	for _, j := range jobs[exact:] {
		if j.t.Status == Fits { // too weak a test to say so
			j.t.Status, j.t.T, j.t.P, j.t.Bound, j.t.DoF, j.t.AtLeast = Untested, nil, nil, nil, 0, false
		}
	}
	return nil
}

// strength is how far a statistic lies above its bound.
func (t *Tie) strength() float64 {
	if t.T == nil {
		return math.Inf(1)
	}
	return *t.T / *t.Bound
}

// conclude tests a tie outside the map with the covariance p of what the map predicts.
func (w *work) conclude(t *Tie, info, p []float64) {
	stat, dof := reliability.Judge(t.Residual, info, p)
	if dof == 0 {
		return
	}
	chance, bound := reliability.Survival(stat, dof), reliability.Bound(dof)
	t.T, t.DoF, t.P, t.Bound = &stat, dof, &chance, &bound
	t.Status = Fits
	if stat > bound {
		t.Status = Contradicts
	}
}

// addForm adds 2 J Q J' for one end.
func (w *work) addForm(sum, j []float64, variable int32) {
	q := w.sigma.Of(variable)
	if q == nil {
		return
	}
	d := w.d
	for r := range d {
		for c := range d {
			for k := range d {
				for l := range d {
					sum[r*d+c] += 2 * j[r*d+k] * q[k*d+l] * j[c*d+l]
				}
			}
		}
	}
}

// jacobian writes J' of a factor, one vector for each component of its residual.
func (w *work) jacobian(b *posegraph.Between, factor int, v *posegraph.Values, vectors []float64, scalars int) {
	d := w.d
	ji, jj := make([]float64, d*d), make([]float64, d*d)
	b.Jacobians(factor, v, ji, jj)
	for c := range d {
		x := vectors[c*scalars:]
		if o := w.sigma.Offset(b.I[factor]); o >= 0 {
			copy(x[o:o+d], ji[c*d:(c+1)*d])
		}
		if o := w.sigma.Offset(b.J[factor]); o >= 0 {
			copy(x[o:o+d], jj[c*d:(c+1)*d])
		}
	}
}

// across writes J times the vectors to p: row r for component r of the factor, column c for vector c.
func (w *work) across(b *posegraph.Between, factor int, v *posegraph.Values, vectors []float64, scalars int, p []float64) {
	d := w.d
	ji, jj := make([]float64, d*d), make([]float64, d*d)
	b.Jacobians(factor, v, ji, jj)
	for c := range d {
		x := vectors[c*scalars:]
		for r := range d {
			sum := 0.0
			if o := w.sigma.Offset(b.I[factor]); o >= 0 {
				for i := range d {
					sum += ji[r*d+i] * x[o+i]
				}
			}
			if o := w.sigma.Offset(b.J[factor]); o >= 0 {
				for i := range d {
					sum += jj[r*d+i] * x[o+i]
				}
			}
			p[r*d+c] = sum
		}
	}
}
