// Package reliability tells what an adjustment can say about its own measurements: which of them the others check, how large an
// error could hide in each, which a statistical test points at, and whether the stated sigmas are those that were met.
//
// It knows no poses. A measurement comes as its residual, its information matrix and the covariance with which the adjusted
// unknowns predict that residual, so that height differences, relative poses and whatever else an adjustment holds are judged alike.
//
// Sources: Baarda, 'A Testing Procedure for Use in Geodetic Networks', Netherlands Geodetic Commission 1968 (detectable errors,
// internal and external reliability, data snooping); Teunissen, 'Testing Theory', Delft 2000; Knight, Wang, Rizos,
// 'Generalised Measures of Reliability for Multiple Outliers', Journal of Geodesy 84, 2010 (measurements of several components).
package reliability

import "gonum.org/v1/gonum/stat/distuv"

// Alpha is the probability with which a test rejects a measurement that is sound, and Power that with which it finds an error of
// the size that is called detectable.
const (
	Alpha = 0.001
	Power = 0.80
)

// Critical is the two-sided bound of a normalised residual, Delta the distance from zero at which such a test has its power: an
// error is detectable from Delta standard deviations of what the test sees of it.
var (
	Critical = distuv.UnitNormal.Quantile(1 - Alpha/2)
	Delta    = Critical + distuv.UnitNormal.Quantile(Power)
)

// Bound returns the bound of a test statistic with so many degrees of freedom.
func Bound(dof int) float64 { return distuv.ChiSquared{K: float64(dof)}.Quantile(1 - Alpha) }

// Survival returns the probability that a sound measurement gives a statistic of t or more.
func Survival(t float64, dof int) float64 { return distuv.ChiSquared{K: float64(dof)}.Survival(t) }
