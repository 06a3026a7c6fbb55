package coordinator

import (
	"math"

	"selvage/internal/posegraph"
	"selvage/internal/reliability"
)

// contradicted returns the test statistic of a control point's coordinates over its bound, 0 when nothing checks them.
func (c *Coordinator) contradicted(j *joint, k int, sigma posegraph.Covariance) float64 {
	r, info := j.priors.Residual(k, &j.graph.Values), j.priors.Info(k)
	of, d := sigma.Of(j.graph.Point(j.priors.Point(k))), c.cfg.Dim
	omega, p := make([]float64, d*d), make([]float64, d*d)
	for a := range d {
		for b := range d {
			omega[a*d+b], p[a*d+b] = info[3*a+b], of[3*a+b]
		}
	}
	f := reliability.Assess(r[:d], omega, p)
	if f.DoF == 0 || math.IsNaN(f.T) {
		return 0
	}
	return f.T / reliability.Bound(f.DoF)
}

// doubt returns the test statistic of the coordinates of point k over its bound, 0 when no control point holds it.
func (c *Coordinator) doubt(j *joint, k int32, sigma posegraph.Covariance) float64 {
	for i := 0; j.priors != nil && i < j.priors.Len(); i++ {
		if j.priors.Point(i) == k {
			return c.contradicted(j, i, sigma)
		}
	}
	return 0
}
