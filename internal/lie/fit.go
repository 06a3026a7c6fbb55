package lie

import "math"

// FitPoints returns the rigid motion that brings the points nearest to others in weighted least squares; nil weights are all 1. In the
// plane it turns about z alone. It reports false when the points leave the rotation open: in one place, or in one line in space.
// Source: Horn, "Closed-form solution of absolute orientation using unit quaternions", JOSA A 4(4), 1987.
func FitPoints(planar bool, from, to [][3]float64, weight []float64) (SE3, bool) {
	var a, b [3]float64
	sum := 0.0
	w := func(i int) float64 {
		if weight == nil {
			return 1
		}
		return weight[i]
	}
	for i := range from {
		for c := range a {
			a[c] += w(i) * from[i][c]
			b[c] += w(i) * to[i][c]
		}
		sum += w(i)
	}
	x := Identity()
	if sum == 0 {
		return x, false
	}
	for c := range a {
		a[c] /= sum
		b[c] /= sum
	}
	var m Mat3 // sum of (to - b)(from - a)'
	size := 0.0
	for i := range from {
		for r := range b {
			for c := range a {
				m[3*r+c] += w(i) * (to[i][r] - b[r]) * (from[i][c] - a[c])
			}
			d, e := from[i][r]-a[r], to[i][r]-b[r]
			size += w(i) * (d*d + e*e)
		}
	}
	ok := true
	if planar {
		c, s := m[0]+m[4], m[3]-m[1]
		n := math.Hypot(c, s)
		if ok = n > 1e-12*size; ok {
			x = SE2{C: c / n, S: s / n}.Spatial()
		}
	} else {
		x.R, ok = NearestRotation(&m)
	}
	t := x.R.Apply(a)
	for c := range t {
		x.T[c] = b[c] - t[c]
	}
	return x, ok
}
