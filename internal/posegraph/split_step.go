package posegraph

import "selvage/internal/lie"

// Split cuts factor k in two at a new variable: the share (between 0 and 1) of the motion from its first pose to the new one,
// the rest from there to its second pose. The new pose lies on the geodesic; the covariance is divided in the same shares so that the
// two legs together say what the factor said: with Z = Z1 Z2 and C its covariance, C1 = share Ad(Z2) C Ad(Z2)' and C2 = (1 - share) C,
// for an error of the first leg counts as Ad(Z2^-1) of it at the end. The variable must be in the graph already; Split returns
// the pose of it seen from the first.
func (b *Between) Split(k int, at int32, share float64) lie.SE3 {
	if !(share > 0 && share < 1) {
		panic("posegraph: a factor is split between its ends")
	}
	twist := b.Z[k].Log()
	for i := range twist {
		twist[i] *= share
	}
	first := lie.Exp(twist)
	second := first.Between(b.Z[k])
	back := second.Inv()
	d := b.dim
	var ad, omega, product, leg [36]float64
	if d == 3 {
		first, second = lie.Planar(&first).Spatial(), lie.Planar(&second).Spatial()
		a := lie.Planar(&back).Adjoint()
		copy(ad[:], a[:])
	} else {
		ad = back.Adjoint()
	}
	copy(omega[:], b.Info(k))
	multiply(&product, &omega, &ad, d)
	for i := 0; i < d; i++ { // Ad' Omega Ad / share
		for j := 0; j < d; j++ {
			for r := 0; r < d; r++ {
				leg[i*d+j] += ad[r*d+i] * product[r*d+j] / share
			}
		}
	}
	end := b.J[k]
	b.J[k], b.Z[k] = at, first
	copy(b.Info(k), leg[:d*d])
	for i := range omega[:d*d] {
		omega[i] /= 1 - share
	}
	b.I, b.J, b.Z, b.W = append(b.I, at), append(b.J, end), append(b.Z, second), append(b.W, b.W[k])
	b.info = append(b.info, omega[:d*d]...)
	return first
}
