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
	group := make([]int, len(w.all))
	count := make([]int, len(classNames)*len(w.s.Robots))
	for i, m := range w.all {
		group[i] = -1
		if *m.weight() != 0 && w.owner[i] >= 0 {
			group[i] = len(classNames)*w.owner[i] + int(w.sort[i])
			count[group[i]]++
		}
	}
	restore := w.keep()
	defer restore()
	all, arrived, err := reliability.Spreads(len(count), w.rounds(), func(scale []float64) (squares, redundancy []float64, err error) {
		for i, g := range group {
			if g >= 0 {
				*w.all[i].weight() = 1 / scale[g]
			}
		}
		if _, err := w.solveTo(nearly); err != nil {
			return nil, nil, err
		}
		squares, redundancy = make([]float64, len(count)), make([]float64, len(count))
		for i, g := range group {
			if g < 0 || w.alone[i] {
				continue
			}
			m := w.all[i]
			weight := *m.weight()
			squares[g] += weight * w.square(m)
			left, info, p := float64(w.measured(m)), w.info(m), w.predicted(m)
			for c, o := range info {
				left -= weight * o * p[c] // trace of the product of two symmetric matrices
			}
			redundancy[g] += left
		}
		return squares, redundancy, w.ctx.Err()
	}, func(scale []float64) ([]float64, error) {
		for i, g := range group {
			if g >= 0 {
				*w.all[i].weight() = 1 / scale[g]
			}
		}
		if _, err := w.solve(); err != nil {
			return nil, err
		}
		return w.shares(group, len(count)), w.ctx.Err()
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
		class = "closures of"
	case "tie", "partial tie":
		class += "s measured by"
	case "sighting":
		class = "sightings by"
	default:
		class += " of"
	}
	what := class + " " + s.Robot
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
