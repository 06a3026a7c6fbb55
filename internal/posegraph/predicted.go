package posegraph

import (
	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// Jacobians writes the derivatives of the residual of factor k at v by the tangents of pose I and of pose J, Dim x Dim row-major:
// J_j = Jr^-1(r), J_i = -Jr^-1(r) Ad((X_i^-1 X_j)^-1).
func (b *Between) Jacobians(k int, v *Values, ji, jj []float64) {
	d := b.dim
	ad, jr := b.jacobianParts(k, v)
	var a [36]float64
	multiply(&a, &jr, &ad, d)
	for i := 0; i < d*d; i++ {
		ji[i], jj[i] = -a[i], jr[i]
	}
}

// jacobianParts returns Ad((X_i^-1 X_j)^-1) and Jr^-1(r), each in the first Dim x Dim entries.
func (b *Between) jacobianParts(k int, v *Values) (ad, jr [36]float64) {
	x := v.Poses[b.J[k]].Between(v.Poses[b.I[k]]) // (X_i^-1 X_j)^-1
	r := b.Residual(k, v)
	if b.dim == 3 {
		a := lie.Planar(&x).Adjoint()
		j := lie.JrInv2([3]float64{r[0], r[1], r[5]})
		copy(ad[:], a[:])
		copy(jr[:], j[:])
		return ad, jr
	}
	return x.Adjoint(), lie.JrInv(r)
}

// Predicted writes J Sigma J' of factor k at v to p, Dim x Dim row-major: the covariance with which the poses predict its residual,
// whether or not the factor is part of the solution.
func (b *Between) Predicted(k int, v *Values, sigma Covariance, p []float64) {
	d := b.dim
	ad, jr := b.jacobianParts(k, v)
	// Covariance of the relative pose: S_jj - A S_ij - S_ji A' + A S_ii A'.
	var sii, sij, as, asa, s [36]float64
	copy(sii[:], sigma.Of(b.I[k]))
	copy(s[:], sigma.Of(b.J[k]))
	sigma.Across(b.slots[k], sij[:])
	multiply(&as, &ad, &sii, d)
	multiplyT(&asa, &as, &ad, d)
	multiply(&as, &ad, &sij, d)
	for i := 0; i < d; i++ {
		for j := 0; j < d; j++ {
			s[i*d+j] += asa[i*d+j] - as[i*d+j] - as[j*d+i]
		}
	}
	multiply(&as, &jr, &s, d)
	multiplyT(&s, &as, &jr, d)
	copy(p[:d*d], s[:])
}

// Scalars returns the length of the vectors that [Covariance.Apply] takes.
func (c Covariance) Scalars() int { return len(c.s.step) }

// Offset returns where the tangent of a variable begins in such a vector, -1 when it is fixed.
func (c Covariance) Offset(variable int32) int { return int(c.s.offset[variable]) }

// Apply multiplies n vectors, stored one after another, by the whole covariance, not only its pattern, in place.
func (c Covariance) Apply(vectors []float64, n int) { c.s.factor.SolveMany(vectors, n) }

// Load is a force on a variable: on one scalar of its tangent, in one of several columns.
type Load struct {
	Variable       int32
	Scalar, Column int
	Value          float64
}

// Respond multiplies the covariance by count columns, at most [sparse.Together], of which only the loads are not zero, and hands the result
// over variable by variable: x[a*sparse.Together+c] is scalar a of its tangent in column c. Loads on what is fixed do nothing.
func (c Covariance) Respond(count int, loads []Load, read func(variable int32, x []float64)) {
	of := make([]sparse.Load, 0, len(loads))
	for _, l := range loads {
		if b := c.s.block[l.Variable]; b >= 0 {
			of = append(of, sparse.Load{Block: int(b), Scalar: l.Scalar, Column: l.Column, Value: l.Value})
		}
	}
	c.s.factor.Respond(count, of, func(block int, x []float64) { read(c.s.variable[block], x) })
}
