package audit

import (
	"selvage/internal/reliability"
)

// removed is the most ties and control points that snooping strikes out: a map with more errors than that needs its verdicts looked at.
const removed = 10

// snoop finds which of the held ties and control points that failed do so by themselves: one error makes others stand out with it. Only
// what the rest determines whole can be struck out, for else the map would come apart.
func (w *work) snoop() error {
	var all []measurement
	var excess []float64 // at the solution at hand
	failed := false
	add := func(m measurement, stat *float64, dof int) {
		all, excess = append(all, m), append(excess, 0)
		if stat != nil && dof == w.measured(m) {
			excess[len(excess)-1] = *stat / reliability.Bound(dof)
			failed = failed || excess[len(excess)-1] > 1
		}
	}
	var names []string
	for k := range w.out.Ties {
		if t := &w.out.Ties[k]; t.held {
			add(t.m, t.T, t.DoF)
			names = append(names, t.ID)
		}
	}
	ties := len(all)
	for k := range w.out.Marks {
		if c := w.out.Marks[k].Control; c != nil && c.index >= 0 {
			add(w.all[c.index], c.T, c.DoF)
			names = append(names, w.out.Marks[k].Mark)
		}
	}
	if !failed {
		return nil
	}
	restore := w.keep()
	defer restore()
	first := true
	struck, err := reliability.Snoop(len(all), removed, func(struck []bool) ([]float64, error) {
		if first {
			first = false
			return excess, nil
		}
		for k, out := range struck {
			if out {
				*all[k].weight() = 0
			}
		}
		if _, err := w.solveTo(nearly); err != nil {
			return nil, err
		}
		alone := w.loners()
		excess := make([]float64, len(all))
		for k, m := range all {
			if struck[k] || alone[w.index(m)] {
				continue
			}
			if f := w.assess(m, w.residual(m)); f.DoF == w.measured(m) {
				excess[k] = f.T / reliability.Bound(f.DoF)
			}
		}
		return excess, nil
	})
	for _, k := range struck {
		if k < ties {
			w.out.Removal = append(w.out.Removal, names[k])
		} else {
			w.out.Controls = append(w.out.Controls, names[k])
		}
	}
	return err
}
