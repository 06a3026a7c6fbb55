package evidence

import "math"

// Schedule is the state of graduated non-convexity with truncated least squares (Yang, Antonante, Tzoumas, Carlone,
// "Graduated non-convexity for robust spatial perception: from non-minimal solvers to global outlier rejection", RA-L 5(2),
// 2020). The caller alternates: solve with the weights, square the residuals, [Schedule.Next].
type Schedule struct {
	bound float64 // squared residual beyond which a tie is cut off
	mu    float64
}

// Floor is the least weight a tie keeps, so that no matrix becomes singular for want of it.
const Floor = 1e-7

const muGrowth = 1.4

// NewSchedule starts a schedule that ends up cutting off ties with r^2 = r' Omega r above bound, given the squared residuals
// of a solution with all weights 1. It reports false if there is nothing to do: no residual is large enough for the truncated
// cost to differ.
func NewSchedule(bound float64, squared []float64) (Schedule, bool) {
	worst := 0.0
	for _, r := range squared {
		worst = math.Max(worst, r)
	}
	if 2*worst <= bound {
		return Schedule{}, false
	}
	return Schedule{bound: bound, mu: bound / (2*worst - bound)}, true
}

// Next writes the weights of the present stage for the squared residuals and advances the schedule. It reports true when all
// weights are decided, that is 1 or Floor.
func (s *Schedule) Next(weights, squared []float64) bool {
	mu := s.mu
	s.mu *= muGrowth
	decided := true
	lower, upper := s.bound*mu/(mu+1), s.bound*(mu+1)/mu
	for i, r := range squared {
		switch {
		case r <= lower:
			weights[i] = 1
		case r >= upper || math.IsNaN(r):
			weights[i] = Floor
		default:
			weights[i] = math.Max(Floor, math.Sqrt(s.bound*mu*(mu+1)/r)-mu)
			decided = false
		}
	}
	return decided
}
