package audit

import (
	"selvage/internal/reliability"
)

// removed is the most ties that snooping strikes out: a map with more errors than that needs its verdicts looked at.
const removed = 10

// snoop finds which of the held ties that failed do so by themselves: one error makes others stand out with it.
func (w *work) snoop() error {
	failed := false
	for k := range w.out.Ties {
		failed = failed || w.out.Ties[k].Status == Failed
	}
	if !failed {
		return nil
	}
	restore := w.keep()
	defer restore()
	first := true
	struck, err := reliability.Snoop(len(w.out.Ties), removed, func(struck []bool) ([]float64, error) {
		excess := make([]float64, len(struck))
		if first { // this is the solution at hand
			first = false
			for k := range w.out.Ties {
				if t := &w.out.Ties[k]; t.held && t.T != nil {
					excess[k] = *t.T / *t.Bound
				}
			}
			return excess, nil
		}
		for k, out := range struck {
			if out {
				w.b.W[w.out.Ties[k].factor] = 0
			}
		}
		if _, err := w.solve(); err != nil {
			return nil, err
		}
		class, factor := w.cuts()
		checked := make([]bool, w.b.Len())
		for i, c := range class {
			checked[factor[i]] = c != 0
		}
		for k := range w.out.Ties {
			t := &w.out.Ties[k]
			if !t.held || struck[k] || !checked[t.factor] {
				continue
			}
			if f := reliability.Assess(w.residual(t.factor), w.b.Info(t.factor), w.predicted(t.factor)); f.DoF > 0 {
				excess[k] = f.T / reliability.Bound(f.DoF)
			}
		}
		return excess, nil
	})
	for _, k := range struck {
		w.out.Removal = append(w.out.Removal, w.out.Ties[k].ID)
	}
	return err
}
