package reliability

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Spread is the estimate of how the errors of a group of measurements compare with their stated sigmas.
type Spread struct {
	Ratio      float64 // real sigma over stated sigma
	Low, High  float64 // bounds of Ratio that hold with 95 %
	Redundancy float64 // what the estimate rests on, like the size of a sample
	Known      bool    // enough redundancy to say anything
}

// enough is the redundancy from which a spread is estimated: below, its 95 % bounds lie more than a factor of 3.5 apart.
const enough = 5

// settled is the relative change of a sigma below which the iteration has arrived; far below what any estimate is certain to.
const settled = 2e-3

// extreme bounds the factors of variances: simulated data without any error would have none.
const extreme = 1e6

// Spreads estimates variance components: one factor for the sigmas of every group. Evaluate adjusts with the variances of the groups
// multiplied by scale and returns for each group the sum of r' Omega r and of the redundancies, both with these variances. Repeated,
// each group's variance times its quotient of the two: Helmert's estimate, in the simplified form of Förstner, 'Ein Verfahren zur
// Schätzung von Varianz- und Kovarianzkomponenten', AVN 86, 1979; at its fixed point that of restricted maximum likelihood.
// The bounds take the quotient as chi-square over its degrees of freedom, with the redundancy for these.
//
// Groups without enough redundancy keep their stated sigmas. Arrived is false when the last of rounds evaluations still changed
// some sigma by more than two in a thousand.
func Spreads(groups, rounds int, evaluate func(scale []float64) (squares, redundancy []float64, err error)) (out []Spread, arrived bool, err error) {
	out = make([]Spread, groups)
	scale := make([]float64, groups)
	for i := range scale {
		scale[i] = 1
	}
	for range rounds {
		squares, redundancy, err := evaluate(scale)
		if err != nil {
			return nil, false, err
		}
		arrived = true
		for i := range out {
			out[i].Redundancy, out[i].Known = redundancy[i], redundancy[i] >= enough
			if !out[i].Known {
				continue
			}
			now := min(max(scale[i]*squares[i]/redundancy[i], 1/extreme), extreme)
			arrived = arrived && math.Abs(math.Sqrt(now/scale[i])-1) < settled
			scale[i] = now
		}
		if arrived {
			break
		}
	}
	for i := range out {
		s := &out[i]
		s.Ratio = math.Sqrt(scale[i])
		if s.Known {
			chi := distuv.ChiSquared{K: s.Redundancy}
			s.Low, s.High = s.Ratio*math.Sqrt(s.Redundancy/chi.Quantile(0.975)), s.Ratio*math.Sqrt(s.Redundancy/chi.Quantile(0.025))
		}
	}
	return out, arrived, nil
}
