package agent

import (
	"fmt"
	"math"

	"selvage/internal/lie"
	"selvage/msgs"
)

// farthest bounds the coordinates a front end may deliver, metres: a tenth of what a message can hold, so that a map which an
// adjustment stretches still fits into one.
const farthest = msgs.MaxMetres / 10

// checkPose refuses what is no rigid motion, or none of the plane in a planar survey.
func checkPose(x *lie.SE3, dim int) error {
	for _, t := range x.T {
		if !(math.Abs(t) <= farthest) {
			return fmt.Errorf("coordinate %g, expected at most %g m", t, float64(farthest))
		}
	}
	product := x.R.Mul(x.R.T())
	for i, v := range product {
		if i%4 == 0 {
			v--
		}
		if !(math.Abs(v) <= 1e-6) {
			return fmt.Errorf("rotation with R R' = %v, expected the identity to 1e-6", product)
		}
	}
	r := &x.R
	if det := r[0]*(r[4]*r[8]-r[5]*r[7]) - r[1]*(r[3]*r[8]-r[5]*r[6]) + r[2]*(r[3]*r[7]-r[4]*r[6]); det < 0 {
		return fmt.Errorf("rotation with determinant %.3g, expected 1", det)
	}
	if off := max(math.Abs(x.T[2]), math.Abs(r[2]), math.Abs(r[5])); dim == 2 && off > 1e-9 {
		return fmt.Errorf("height or tilt %.3g in a planar survey, expected none to 1e-9", off)
	}
	return nil
}

// checkMeasurement refuses a pose as [checkPose] does, and an information matrix as [checkInformation] does, over the components that
// the survey has.
func checkMeasurement(z *lie.SE3, info *[36]float64, dim int) error {
	if err := checkPose(z, dim); err != nil {
		return err
	}
	space := dim == 3
	return checkInformation(info[:], 6, []bool{true, true, space, space, space, true})
}

// checkInformation refuses an information matrix n x n that is not finite, symmetric and positive semidefinite, both to 1e-9 of its
// unit-diagonal scaling, over the components that count.
func checkInformation(info []float64, n int, counts []bool) error {
	var l [6][6]float64 // Cholesky factor of the scaled matrix with 1e-9 on its diagonal
	for i := range n {
		if !counts[i] {
			continue
		}
		for j := range i + 1 {
			if !counts[j] {
				continue
			}
			v, scale := info[n*i+j], math.Sqrt(info[(n+1)*i])*math.Sqrt(info[(n+1)*j])
			if !(info[(n+1)*i] >= 0 && math.Abs(v) <= msgs.MaxMatrix && math.Abs(v-info[n*j+i]) <= 1e-9*scale) {
				return fmt.Errorf("information %g and %g in row and column %d, %d: expected equal finite numbers, not negative on the diagonal", v, info[n*j+i], i, j)
			}
			if scale > 0 {
				v /= scale
			} else if v != 0 {
				return fmt.Errorf("information %g in row %d, column %d beside a zero on the diagonal", v, i, j)
			}
			if i == j {
				v += 1e-9
			}
			for k := range j {
				v -= l[i][k] * l[j][k]
			}
			switch {
			case i != j:
				l[i][j] = v / l[j][j]
			case !(v > 0):
				return fmt.Errorf("information is not positive semidefinite at row %d", i)
			default:
				l[i][i] = math.Sqrt(v)
			}
		}
	}
	return nil
}
