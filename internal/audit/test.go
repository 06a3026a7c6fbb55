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
		r := w.residual(t.m)
		m, rad := w.lengths(t.m, r)
		t.Residual, t.ResidualM, t.ResidualRad = r, w.lengthOf(t.m, m), w.angleOf(t.m, rad)
		if w.alone[w.index(t.m)] {
			w.unchecked(t)
			continue
		}
		w.figures(t, r)
	}
	return w.judge()
}

// unchecked says that nothing checks a held tie.
func (w *work) unchecked(t *Tie) {
	none := make([]float64, len(t.Parts))
	t.Status = Unchecked
	w.redundancies(t, none)
}

// figures fills in those of a held tie.
func (w *work) figures(t *Tie, r []float64) {
	f := w.assess(t.m, r)
	w.redundancies(t, f.Redundancy)
	t.DoF = f.DoF
	if f.DoF == 0 {
		w.unchecked(t)
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
	turns := w.metres(t.m)
	t.DetectableM, t.DetectableRad = largest(f.Detectable[:turns]), largest(f.Detectable[turns:])
	if m, rad := w.lengths(t.m, f.Apart); !math.IsNaN(m) && !math.IsNaN(rad) {
		t.ApartM, t.ApartRad = w.lengthOf(t.m, m), w.angleOf(t.m, rad)
	}
}

// lengthOf returns a figure in metres, nil for what measures none; angleOf that in radians.
func (w *work) lengthOf(m measurement, x float64) *float64 {
	if w.metres(m) == 0 {
		return nil
	}
	return &x
}

func (w *work) angleOf(m measurement, x float64) *float64 {
	if w.metres(m) == len(w.parts(m)) {
		return nil
	}
	return &x
}

// redundancies fills in the means over the measured components.
func (w *work) redundancies(t *Tie, of []float64) {
	turns, n := w.metres(t.m), len(of)
	t.Redundancy, t.RedundancyTranslation, t.RedundancyRotation = w.mean(t.m, of, 0, n), w.mean(t.m, of, 0, turns), w.mean(t.m, of, turns, n)
}

// mean returns the mean of the redundancies of measured components from up to before to; nil where none was measured.
func (w *work) mean(m measurement, redundancy []float64, from, to int) *float64 {
	sum, n := 0.0, 0
	info := w.info(m)
	for c := from; c < to; c++ {
		if info[c*(len(redundancy)+1)] > 0 {
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
