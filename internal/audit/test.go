package audit

import (
	"math"

	"selvage/internal/reliability"
)

// test computes the figures of every tie: those of held ties from the redundancy that is left to them, those of others against what
// the map predicts.
func (w *work) test() error {
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if !t.held {
			continue
		}
		r := w.residual(t.factor)
		m, rad := w.lengths(r)
		t.Residual, t.ResidualM, t.ResidualRad = r, &m, &rad
		if w.bridge[t.factor] {
			zero := 0.0
			t.Status, t.Redundancy, t.RedundancyTranslation, t.RedundancyRotation = Unchecked, &zero, &zero, &zero
			continue
		}
		w.assess(t, r)
	}
	return w.judge()
}

// assess fills in the figures of a held tie that is no bridge.
func (w *work) assess(t *Tie, r []float64) {
	f := reliability.Assess(r, w.b.Info(t.factor), w.predicted(t.factor))
	turns := w.turns()
	t.Redundancy, t.RedundancyTranslation, t.RedundancyRotation =
		w.mean(t.factor, f.Redundancy, 0, w.d), w.mean(t.factor, f.Redundancy, 0, turns), w.mean(t.factor, f.Redundancy, turns, w.d)
	t.DoF = f.DoF
	if f.DoF == 0 {
		t.Status = Unchecked
		return
	}
	p, bound := reliability.Survival(f.T, f.DoF), reliability.Bound(f.DoF)
	t.T, t.P, t.Bound = &f.T, &p, &bound
	t.Status = Passed
	if f.T > bound {
		t.Status = Failed
	}
	for c := range f.W {
		t.W = append(t.W, Figure(f.W[c]))
		t.Detectable = append(t.Detectable, Figure(f.Detectable[c]))
		if f.Effect[c] > t.effect { // not of NaN
			t.effect, t.component = f.Effect[c], c
		}
	}
	t.DetectableM, t.DetectableRad = largest(f.Detectable[:turns]), largest(f.Detectable[turns:])
	if m, rad := w.lengths(f.Apart); !math.IsNaN(m) && !math.IsNaN(rad) {
		t.ApartM, t.ApartRad = &m, &rad
	}
}

// lengths returns the translation and the rotation of a residual, metres and radians.
func (w *work) lengths(r []float64) (m, rad float64) {
	for c, x := range r {
		if c < w.turns() {
			m += x * x
		} else {
			rad += x * x
		}
	}
	return math.Sqrt(m), math.Sqrt(rad)
}

// mean returns the mean of the redundancies of measured components from up to before to; nil where none was measured.
func (w *work) mean(factor int, redundancy []float64, from, to int) *float64 {
	sum, n := 0.0, 0
	for c := from; c < to; c++ {
		if w.b.Info(factor)[c*(w.d+1)] > 0 {
			sum += redundancy[c]
			n++
		}
	}
	if n == 0 {
		return nil
	}
	sum /= float64(n)
	return &sum
}

// largest returns the largest number that is one, nil when there is none.
func largest(all []float64) *float64 {
	var out *float64
	for _, x := range all {
		if !math.IsNaN(x) && (out == nil || x > *out) {
			out = &x
		}
	}
	return out
}
