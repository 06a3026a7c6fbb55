package reliability

// Snoop is data snooping: adjust, strike out the measurement whose statistic exceeds its bound by most, and repeat until none does or
// limit have been struck out. One error makes the residuals of many stand out; only after its removal is it known which
// of the others do so by themselves.
//
// Adjust is told which measurements are struck out and returns, for every other one, its statistic over its bound (1 or less:
// passed; zero where nothing checks it). Snoop returns the measurements struck out, in that order.
func Snoop(n, limit int, adjust func(struck []bool) ([]float64, error)) ([]int, error) {
	var out []int
	struck := make([]bool, n)
	for len(out) < limit {
		excess, err := adjust(struck)
		if err != nil {
			return nil, err
		}
		worst := -1
		for k, x := range excess {
			if !struck[k] && x > 1 && (worst < 0 || x > excess[worst]) {
				worst = k
			}
		}
		if worst < 0 {
			return out, nil
		}
		struck[worst] = true
		out = append(out, worst)
	}
	return out, nil
}
