package audit

import (
	"cmp"
	"math"
	"slices"

	"selvage/internal/reliability"
)

// judged bounds the numbers that exact tests of ties outside the map are computed from, as [followed] does: of 100 000 keyframes in
// space seventy ties.
const judged = 2.5e8

// judge tests the ties that are not held against the map. Their ends share no factor, so what the map predicts for them needs
// solutions of their own. Since the covariance of a difference is at most twice the sum of the covariances, a test with
// that sum is never too strict: where it rejects, and there is no room for the exact one, it is enough.
func (w *work) judge() error {
	type job struct {
		t *Tie
		d derivative
	}
	var jobs []job
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if !t.placed {
			continue
		}
		var err error
		if t.m, err = w.outside(k); err != nil {
			return err
		}
		t.Residual = w.residual(t.m)
		m, rad := w.lengths(t.m, t.Residual)
		t.ResidualM, t.ResidualRad = w.lengthOf(t.m, m), w.angleOf(t.m, rad)
		t.ApartM, t.ApartRad = t.ResidualM, t.ResidualRad
		j := job{t, w.derivative(t.m)}
		w.conclude(t, w.apartForm(&j.d))
		t.AtLeast = true
		jobs = append(jobs, j)
	}
	// Those that the weak test leaves in doubt come first.
	slices.SortStableFunc(jobs, func(x, y job) int { return cmp.Compare(x.t.strength(), y.t.strength()) })
	scalars := w.sigma.Scalars()
	exact := min(len(jobs), int(judged)/max(1, scalars*w.d))
	const together = 8
	vectors := make([]float64, min(together, max(1, exact))*w.d*scalars)
	for first := 0; first < exact; first += together {
		if err := w.ctx.Err(); err != nil {
			return err
		}
		batch := jobs[first:min(first+together, exact)]
		columns := vectors[:len(batch)*w.d*scalars]
		clear(columns)
		for i := range batch {
			batch[i].d.spread(w.sigma, columns[i*w.d*scalars:], scalars)
		}
		w.sigma.Apply(columns, len(batch)*w.d)
		for i := range batch {
			j := &batch[i]
			w.conclude(j.t, j.d.gather(w.sigma, columns[i*w.d*scalars:], scalars, j.d.rows))
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
func (w *work) conclude(t *Tie, p []float64) {
	stat, dof := reliability.Judge(t.Residual, w.info(t.m), p)
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

// apartForm returns the sum of 2 J Q J' of the two ends.
func (w *work) apartForm(d *derivative) []float64 {
	sum := make([]float64, d.rows*d.rows)
	for e, j := range d.by {
		q := w.sigma.Of(d.at[e])
		if q == nil {
			continue
		}
		width := len(j) / d.rows
		for r := range d.rows {
			for c := range d.rows {
				for k := range width {
					for l := range width {
						sum[r*d.rows+c] += 2 * j[r*width+k] * q[k*width+l] * j[c*width+l]
					}
				}
			}
		}
	}
	return sum
}
