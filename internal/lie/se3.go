package lie

import "math"

// SE3 is a rigid motion p -> R p + T: R row-major and orthonormal, T in metres.
type SE3 struct {
	R Mat3
	T [3]float64
}

// Tangent is a vector of the tangent space of SE(3): [x y z rx ry rz], metres then radians.
type Tangent = [6]float64

// Identity returns the motion that moves nothing.
func Identity() SE3 { return SE3{R: Mat3{1, 0, 0, 0, 1, 0, 0, 0, 1}} }

// FromQuat returns the motion with translation t (m) and rotation q, which is normalised on the way.
func FromQuat(t [3]float64, q Quat) SE3 { return SE3{RotationOf(q), t} }

// Quat returns the rotation of x as a unit quaternion, w >= 0.
func (x *SE3) Quat() Quat { return QuatOf(&x.R) }

// Mul returns x y: first y, then x.
func (x SE3) Mul(y SE3) SE3 {
	t := x.R.Apply(y.T)
	return SE3{x.R.Mul(y.R), [3]float64{t[0] + x.T[0], t[1] + x.T[1], t[2] + x.T[2]}}
}

// Inv returns the inverse motion.
func (x SE3) Inv() SE3 {
	rt := x.R.T()
	t := rt.Apply(x.T)
	return SE3{rt, [3]float64{-t[0], -t[1], -t[2]}}
}

// Between returns x^-1 y, the pose of y seen from x. The translations are subtracted first, so large common coordinates do no harm.
func (x SE3) Between(y SE3) SE3 {
	rt := x.R.T()
	return SE3{rt.Mul(y.R), rt.Apply([3]float64{y.T[0] - x.T[0], y.T[1] - x.T[1], y.T[2] - x.T[2]})}
}

// Apply returns the point p carried by x.
func (x SE3) Apply(p [3]float64) [3]float64 {
	q := x.R.Apply(p)
	return [3]float64{q[0] + x.T[0], q[1] + x.T[1], q[2] + x.T[2]}
}

// Plus returns x Exp(xi), its rotation cleaned of rounding: the step of an optimiser.
func (x SE3) Plus(xi Tangent) SE3 {
	y := x.Mul(Exp(xi))
	orthonormalise(&y.R)
	return y
}

// Exp returns the motion with the constant twist xi applied for unit time.
func Exp(xi Tangent) SE3 {
	rho := [3]float64{xi[0], xi[1], xi[2]}
	phi := [3]float64{xi[3], xi[4], xi[5]}
	u := phi[0]*phi[0] + phi[1]*phi[1] + phi[2]*phi[2]
	A, B, C := sincCoefficients(u)
	return SE3{expSO3(phi, A, B), expSO3(phi, B, C).Apply(rho)} // V = I + B W + C W^2
}

// Log returns the twist of x with the smallest angle, the inverse of [Exp]; the angle lies in [0, pi].
func (x *SE3) Log() Tangent {
	phi := LogSO3(&x.R)
	u := phi[0]*phi[0] + phi[1]*phi[1] + phi[2]*phi[2]
	k, _ := cotCoefficients(u)
	// V^-1 = I - W/2 + k W^2
	rho := expSO3(phi, -0.5, k).Apply(x.T)
	return Tangent{rho[0], rho[1], rho[2], phi[0], phi[1], phi[2]}
}

// cotCoefficients returns, for u = th^2, k = (1 - (th/2) cot(th/2))/th^2 and b = -dk/du, the two scalars of the inverse Jacobians.
// Below th = 0.3 by series with the coefficients |B_2n|/(2n)!, B_2n Bernoulli's numbers.
func cotCoefficients(u float64) (k, b float64) {
	if u < 0.09 {
		k = 1./12 + u*(1./720+u*(1./30240+u*(1./1209600+u*(1./47900160+u*(691./1307674368000+u/74724249600)))))
		b = -(1./720 + u*(2./30240+u*(3./1209600+u*(4./47900160+u*(5*691./1307674368000+u*(6./74724249600))))))
		return k, b
	}
	th := math.Sqrt(u)
	sin, cos := math.Sincos(th / 2)
	c := th / 2 * cos / sin
	dc := cos/(2*sin) - th/(4*sin*sin) // dc/dth
	return (1 - c) / u, (th*dc/2 + 1 - c) / (u * u)
}

// Adjoint returns Ad(X), 6 x 6: Ad(X) xi = Log(X Exp(xi) X^-1).
func (x *SE3) Adjoint() (a [36]float64) {
	tr := Skew(x.T).Mul(x.R)
	for i := 0; i < 3; i++ {
		for j := 0; j < 3; j++ {
			a[6*i+j] = x.R[3*i+j]
			a[6*(i+3)+j+3] = x.R[3*i+j]
			a[6*i+j+3] = tr[3*i+j]
		}
	}
	return a
}

// Jr returns the right Jacobian of Exp at xi, 6 x 6, as a polynomial of ad(xi) (Barfoot 2017, section 7.1.5). Its
// coefficients come from their power series below an angle of 1, where the closed forms cancel.
func Jr(xi Tangent) (j [36]float64) {
	u := xi[3]*xi[3] + xi[4]*xi[4] + xi[5]*xi[5]
	var f [4]float64
	if u < 1 {
		// f1..f4 = sum (-1)^k ... u^k; a factorial at a time.
		fact, power := 2.0, 1.0 // (2k)! and u^(k-1), k = 1
		sign := -1.0            // (-1)^k
		for k := 1.0; k < 12; k++ {
			odd := fact * (2*k + 1)
			f[0] -= sign * (2 - k) / fact * power
			f[1] += sign * (k - 2) / odd * power
			nextFact := odd * (2*k + 2)
			nextOdd := nextFact * (2*k + 3)
			f[2] -= sign * k / nextFact * power
			f[3] -= sign * k / nextOdd * power
			fact, power, sign = nextFact, power*u, -sign
		}
	} else {
		th := math.Sqrt(u)
		sin, cos := math.Sincos(th)
		f[0] = (4 - th*sin - 4*cos) / (2 * u)
		f[1] = (4*th - 5*sin + th*cos) / (2 * u * th)
		f[2] = (2 - th*sin - 2*cos) / (2 * u * u)
		f[3] = (2*th - 3*sin + th*cos) / (2 * u * u * th)
	}
	f[0], f[2] = -f[0], -f[2] // the left Jacobian at -xi
	ad := adjointOf(xi)
	power := ad
	for i := 0; i < 6; i++ {
		j[7*i] = 1
	}
	for k := 0; k < 4; k++ {
		for i := range j {
			j[i] += f[k] * power[i]
		}
		power = mul6(&power, &ad)
	}
	return j
}

// JrInv returns the inverse of the right Jacobian of Exp at xi, 6 x 6; it is block upper triangular, [[J Q] [0 J]].
func JrInv(xi Tangent) (j [36]float64) {
	var a, q Mat3
	JrInvBlocks(&xi, &a, &q)
	for i := 0; i < 3; i++ {
		for k := 0; k < 3; k++ {
			j[6*i+k] = a[3*i+k]
			j[6*(i+3)+k+3] = a[3*i+k]
			j[6*i+k+3] = q[3*i+k]
		}
	}
	return j
}

// JrInvBlocks writes the two distinct blocks of [JrInv]: J on the diagonal and Q above it.
//
// From Jr^-1 = I + ad/2 + a ad^2 + b ad^4 (the characteristic equation ad (ad^2 + th^2)^2 = 0 leaves no other term), multiplied
// out with ad = [[W V] [0 W]], V = Skew(rho), W = Skew(phi), s = rho.phi:
//
//	J = I + W/2 + k (phi phi' - th^2 I)
//	Q = V/2 + k (phi rho' + rho phi') - 2 b s phi phi' + 2 (b th^2 - k) s I
func JrInvBlocks(xi *Tangent, J, Q *Mat3) {
	r0, r1, r2 := xi[0], xi[1], xi[2]
	p0, p1, p2 := xi[3], xi[4], xi[5]
	u := p0*p0 + p1*p1 + p2*p2
	k, b := cotCoefficients(u)
	d := 1 - k*u
	J[0], J[1], J[2] = d+k*p0*p0, k*p0*p1-p2/2, k*p0*p2+p1/2
	J[3], J[4], J[5] = k*p0*p1+p2/2, d+k*p1*p1, k*p1*p2-p0/2
	J[6], J[7], J[8] = k*p0*p2-p1/2, k*p1*p2+p0/2, d+k*p2*p2
	s := r0*p0 + r1*p1 + r2*p2
	m := -2 * b * s
	e := 2 * (b*u - k) * s
	Q[0], Q[4], Q[8] = 2*k*p0*r0+m*p0*p0+e, 2*k*p1*r1+m*p1*p1+e, 2*k*p2*r2+m*p2*p2+e
	xy := k*(p0*r1+r0*p1) + m*p0*p1
	xz := k*(p0*r2+r0*p2) + m*p0*p2
	yz := k*(p1*r2+r1*p2) + m*p1*p2
	Q[1], Q[3] = xy-r2/2, xy+r2/2
	Q[2], Q[6] = xz+r1/2, xz-r1/2
	Q[5], Q[7] = yz-r0/2, yz+r0/2
}

// adjointOf returns ad(xi) = [[W V] [0 W]].
func adjointOf(xi Tangent) (a [36]float64) {
	v := Skew([3]float64{xi[0], xi[1], xi[2]})
	w := Skew([3]float64{xi[3], xi[4], xi[5]})
	for i := 0; i < 3; i++ {
		for j := 0; j < 3; j++ {
			a[6*i+j] = w[3*i+j]
			a[6*(i+3)+j+3] = w[3*i+j]
			a[6*i+j+3] = v[3*i+j]
		}
	}
	return a
}

func mul6(a, b *[36]float64) (c [36]float64) {
	for i := 0; i < 6; i++ {
		for k := 0; k < 6; k++ {
			for j := 0; j < 6; j++ {
				c[6*i+j] += a[6*i+k] * b[6*k+j]
			}
		}
	}
	return c
}

// Align returns the motion T with T from[k] close to to[k]: the chordal mean of the rotations, then the mean of the positions. It is
// exact when one motion carries all of from into to. Both lists have the same length, at least one.
func Align(from, to []SE3) SE3 {
	var m Mat3
	for k := range from {
		d := to[k].R.Mul(from[k].R.T())
		for i := range m {
			m[i] += d[i]
		}
	}
	r, _ := NearestRotation(&m)
	var t [3]float64
	for k := range from {
		p := r.Apply(from[k].T)
		for i := range t {
			t[i] += (to[k].T[i] - p[i]) / float64(len(from))
		}
	}
	return SE3{r, t}
}
