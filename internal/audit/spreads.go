package audit

import (
	"fmt"

	"selvage/internal/reliability"
)

// rounds bounds the iteration that estimates the real spread: groups that little checks settle slowly, and every round adjusts the
// survey again.
func (w *work) rounds() int { return min(100, max(8, 3_000_000/max(1, w.sigma.Scalars()))) }

// spreads estimates, per robot and class of measurement, how the errors that were met compare with the stated sigmas. A tie counts for
// the robot that measured it.
func (w *work) spreads() error {
	kinds := w.kinds()
	robot := make(map[string]int, len(w.s.Robots))
	for i := range w.s.Robots {
		robot[w.s.Robots[i].ID] = i
	}
	group := make([]int, w.b.Len())
	count := make([]int, len(classNames)*len(w.s.Robots))
	for k := range group {
		group[k] = -1
		if w.b.W[k] != 0 {
			group[k] = len(classNames)*robot[w.p.Keys[w.b.I[k]].Robot] + kinds[k]
			count[group[k]]++
		}
	}
	restore := w.keep()
	defer restore()
	all, arrived, err := reliability.Spreads(len(count), w.rounds(), func(scale []float64) (squares, redundancy []float64, err error) {
		for k, g := range group {
			if g >= 0 {
				w.b.W[k] = 1 / scale[g]
			}
		}
		if _, err := w.solve(); err != nil {
			return nil, nil, err
		}
		squares, redundancy = make([]float64, len(count)), make([]float64, len(count))
		p := make([]float64, w.d*w.d)
		for k, g := range group {
			if g < 0 || w.bridge[k] {
				continue
			}
			squares[g] += w.b.W[k] * w.b.Chi2(k, &w.p.Graph.Values)
			w.b.Predicted(k, &w.p.Graph.Values, w.sigma, p)
			left := float64(w.measured(k))
			for i, o := range w.b.Info(k) {
				left -= w.b.W[k] * o * p[i] // trace of the product of two symmetric matrices
			}
			redundancy[g] += left
		}
		return squares, redundancy, w.ctx.Err()
	})
	if err != nil {
		return err
	}
	w.out.Arrived = arrived
	for g := range all {
		if count[g] == 0 {
			continue
		}
		a := &all[g]
		s := Spread{Robot: w.s.Robots[g/len(classNames)].ID, Class: classNames[g%len(classNames)], Measurements: count[g], Redundancy: a.Redundancy}
		if a.Known {
			s.Ratio, s.Low, s.High = &a.Ratio, &a.Low, &a.High
		}
		s.Words = s.words()
		w.out.Spread = append(w.out.Spread, s)
	}
	return nil
}

// words says it plainly.
func (s *Spread) words() string {
	class := s.Class
	switch class {
	case "closure":
		class = "closures"
	case "tie":
		class = "ties measured by"
	}
	what := fmt.Sprintf("%s of %s", class, s.Robot)
	if s.Class == "tie" {
		what = fmt.Sprintf("%s %s", class, s.Robot)
	}
	switch {
	case s.Ratio == nil:
		return what + ": too little checks it to tell the real spread"
	case *s.Low > 1:
		return fmt.Sprintf("%s: real spread %s times the stated", what, rough(*s.Ratio))
	case *s.High < 1:
		return fmt.Sprintf("%s: real spread only %s times the stated", what, rough(*s.Ratio))
	}
	return what + ": as stated"
}
