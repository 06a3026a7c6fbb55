package reliability

import (
	"math"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"
)

// Spread is the estimate of how the errors of a group of measurements compare with their stated sigmas.
type Spread struct {
	Ratio      float64 // real sigma over stated sigma
	Low, High  float64 // bounds of Ratio that hold with 95 %
	Redundancy float64 // share of the errors of the group that shows
	Freedoms   float64 // what the estimate rests on: of a sample of so many the bounds would be the same
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
//
// Where groups check each other, or a group is checked by what is less certain than itself, an estimate rests on less than its
// redundancy. Shared, called once with the variances at the estimates, returns tr R_gh R_hg for all pairs of groups, groups x groups, R
// being the redundancy matrix of the measurements scaled to unit variance; half of that is the information of restricted maximum
// likelihood on the logarithms of the variances, and its inverse tells their freedoms.
//
// Groups without enough redundancy keep their stated sigmas. Arrived is false when the last of rounds evaluations still changed
// some sigma by more than two in a thousand.
func Spreads(groups, rounds int, evaluate func(scale []float64) (squares, redundancy []float64, err error), shared func(scale []float64) ([]float64, error)) (out []Spread, arrived bool, err error) {
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
	information, err := shared(scale)
	if err != nil {
		return nil, false, err
	}
	free := freedoms(out, information)
	for i := range out {
		s := &out[i]
		s.Ratio = math.Sqrt(scale[i])
		if s.Known {
			s.Freedoms = min(free[i], s.Redundancy)
			s.Low = s.Ratio * lowest(s.Freedoms, min(1, information[i*groups+i]/s.Redundancy))
			s.High = s.Ratio * math.Sqrt(s.Freedoms/distuv.ChiSquared{K: s.Freedoms}.Quantile(0.025))
		}
	}
	return out, arrived, nil
}

// lowest returns the lower bound of a ratio over its estimate. What shows of a group is its variance and that of what checks it, of which
// its own is the share given: their sum is like the variance of a sample, and the other part is taken from it as it stands.
func lowest(freedoms, share float64) float64 {
	n := freedoms / (share * share) // of the sum, for its variance to have these freedoms
	bound := (n/distuv.ChiSquared{K: n}.Quantile(0.975) - 1 + share) / share
	return math.Sqrt(max(0, bound))
}

// few is the least number of freedoms: where an estimate rests on nothing its bounds are wide enough with that.
const few = 0.5

// freedoms returns for each estimated group the inverse of its diagonal element in the inverse of the matrix.
func freedoms(all []Spread, shared []float64) []float64 {
	var known []int
	for i := range all {
		if all[i].Known {
			known = append(known, i)
		}
	}
	out := make([]float64, len(all))
	if len(known) == 0 {
		return out
	}
	m := mat.NewSymDense(len(known), nil)
	for a, i := range known {
		for b, j := range known {
			m.SetSym(a, b, (shared[i*len(all)+j]+shared[j*len(all)+i])/2)
		}
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(m, true) {
		panic("reliability: shares of redundancy that are not finite")
	}
	var u mat.Dense
	eigen.VectorsTo(&u)
	for a, i := range known {
		inverse := 0.0
		for k, value := range eigen.Values(nil) {
			inverse += u.At(a, k) * u.At(a, k) / max(value, few/4)
		}
		out[i] = max(few, 1/inverse)
	}
	return out
}
