package lie

import "math"

// Quat is a unit quaternion x, y, z, w.
type Quat [4]float64

// Mat3 is a 3 x 3 matrix, row-major.
type Mat3 [9]float64

// Skew returns the matrix W with W v = w x v.
func Skew(w [3]float64) Mat3 {
	return Mat3{0, -w[2], w[1], w[2], 0, -w[0], -w[1], w[0], 0}
}

// Mul returns the product a b.
func (a Mat3) Mul(b Mat3) (c Mat3) {
	for i := 0; i < 9; i += 3 {
		x, y, z := a[i], a[i+1], a[i+2]
		c[i] = x*b[0] + y*b[3] + z*b[6]
		c[i+1] = x*b[1] + y*b[4] + z*b[7]
		c[i+2] = x*b[2] + y*b[5] + z*b[8]
	}
	return c
}

// T returns the transpose of a.
func (a Mat3) T() Mat3 { return Mat3{a[0], a[3], a[6], a[1], a[4], a[7], a[2], a[5], a[8]} }

// Apply returns a v.
func (a Mat3) Apply(v [3]float64) [3]float64 {
	return [3]float64{
		a[0]*v[0] + a[1]*v[1] + a[2]*v[2],
		a[3]*v[0] + a[4]*v[1] + a[5]*v[2],
		a[6]*v[0] + a[7]*v[1] + a[8]*v[2],
	}
}

// RotationOf returns the rotation matrix of q, which is normalised on the way. The zero quaternion is a programming mistake.
func RotationOf(q Quat) Mat3 {
	n := q[0]*q[0] + q[1]*q[1] + q[2]*q[2] + q[3]*q[3]
	if n == 0 {
		panic("lie: zero quaternion")
	}
	s := 2 / n
	x, y, z, w := q[0], q[1], q[2], q[3]
	return Mat3{
		1 - s*(y*y+z*z), s * (x*y - z*w), s * (x*z + y*w),
		s * (x*y + z*w), 1 - s*(x*x+z*z), s * (y*z - x*w),
		s * (x*z - y*w), s * (y*z + x*w), 1 - s*(x*x+y*y),
	}
}

// QuatOf returns the unit quaternion of a rotation matrix, w >= 0. It starts from the largest of the four components, so no
// digit is lost near half a turn (Shepperd, "Quaternion from rotation matrix", J. Guidance and Control 1(3), 1978).
func QuatOf(r *Mat3) Quat {
	var x, y, z, w float64
	tr := r[0] + r[4] + r[8]
	switch {
	case tr >= r[0] && tr >= r[4] && tr >= r[8]:
		w = 1 + tr
		x, y, z = r[7]-r[5], r[2]-r[6], r[3]-r[1]
	case r[0] >= r[4] && r[0] >= r[8]:
		x = 1 + 2*r[0] - tr
		y, z, w = r[1]+r[3], r[2]+r[6], r[7]-r[5]
	case r[4] >= r[8]:
		y = 1 + 2*r[4] - tr
		x, z, w = r[1]+r[3], r[5]+r[7], r[2]-r[6]
	default:
		z = 1 + 2*r[8] - tr
		x, y, w = r[2]+r[6], r[5]+r[7], r[3]-r[1]
	}
	s := 1 / math.Sqrt(x*x+y*y+z*z+w*w)
	if w < 0 {
		s = -s
	}
	return Quat{x * s, y * s, z * s, w * s}
}

// sincCoefficients returns A = sin th/th, B = (1 - cos th)/th^2 and C = (th - sin th)/th^3 for u = th^2, each to rounding: B by
// the half angle, C below th = 0.3 by its series (the closed form cancels there).
func sincCoefficients(u float64) (A, B, C float64) {
	if u == 0 {
		return 1, 0.5, 1. / 6
	}
	th := math.Sqrt(u)
	sin := math.Sin(th)
	A = sin / th
	h := math.Sin(th/2) / th
	B = 2 * h * h
	if u < 0.09 {
		C = 1./6 + u*(-1./120+u*(1./5040+u*(-1./362880+u*(1./39916800-u/6227020800))))
	} else {
		C = (th - sin) / (th * u)
	}
	return A, B, C
}

// expSO3 returns I + A W + B W^2 with W = Skew(phi).
func expSO3(p [3]float64, A, B float64) Mat3 {
	x, y, z := p[0], p[1], p[2]
	return Mat3{
		1 - B*(y*y+z*z), B*x*y - A*z, B*x*z + A*y,
		B*x*y + A*z, 1 - B*(x*x+z*z), B*y*z - A*x,
		B*x*z - A*y, B*y*z + A*x, 1 - B*(x*x+y*y),
	}
}

// ExpSO3 returns the rotation by the vector phi (radians).
func ExpSO3(phi [3]float64) Mat3 {
	A, B, _ := sincCoefficients(phi[0]*phi[0] + phi[1]*phi[1] + phi[2]*phi[2])
	return expSO3(phi, A, B)
}

// LogSO3 returns the rotation vector of r, its length in [0, pi].
func LogSO3(r *Mat3) [3]float64 {
	q := QuatOf(r)
	n := math.Sqrt(q[0]*q[0] + q[1]*q[1] + q[2]*q[2])
	if n < 1e-150 {
		return [3]float64{2 * q[0], 2 * q[1], 2 * q[2]}
	}
	s := 2 * math.Atan2(n, q[3]) / n
	return [3]float64{s * q[0], s * q[1], s * q[2]}
}

// orthonormalise removes the rounding that products leave in a rotation: one Newton step of the polar factor.
func orthonormalise(r *Mat3) {
	var e Mat3 // r' r
	for i := 0; i < 3; i++ {
		for j := i; j < 3; j++ {
			v := r[i]*r[j] + r[3+i]*r[3+j] + r[6+i]*r[6+j]
			e[3*i+j], e[3*j+i] = -0.5*v, -0.5*v
		}
	}
	e[0] += 1.5
	e[4] += 1.5
	e[8] += 1.5
	*r = r.Mul(e)
}

// NearestRotation returns the rotation closest to m in the Frobenius norm, determinant +1, and whether m determines it: false
// when the two smallest singular values leave the rotation open. It is the projection of the chordal mean (Horn, Hilden,
// Negahdaripour, "Closed-form solution of absolute orientation using orthonormal matrices", JOSA A 5(7), 1988), found here as the
// dominant eigenvector of the 4 x 4 quaternion matrix by Jacobi rotations.
func NearestRotation(m *Mat3) (Mat3, bool) {
	scale := 0.0
	for _, v := range m {
		scale = math.Max(scale, math.Abs(v))
	}
	if scale == 0 || math.IsInf(scale, 0) || math.IsNaN(scale) {
		return Mat3{1, 0, 0, 0, 1, 0, 0, 0, 1}, false
	}
	s := 1 / scale
	var a [4][4]float64
	xx, xy, xz := s*m[0], s*m[1], s*m[2]
	yx, yy, yz := s*m[3], s*m[4], s*m[5]
	zx, zy, zz := s*m[6], s*m[7], s*m[8]
	a[0] = [4]float64{xx - yy - zz, xy + yx, xz + zx, zy - yz}
	a[1] = [4]float64{xy + yx, yy - xx - zz, yz + zy, xz - zx}
	a[2] = [4]float64{xz + zx, yz + zy, zz - xx - yy, yx - xy}
	a[3] = [4]float64{zy - yz, xz - zx, yx - xy, xx + yy + zz}
	values, vectors := jacobi4(&a)
	best, second := 0, -1
	for i := 1; i < 4; i++ {
		if values[i] > values[best] {
			best = i
		}
	}
	for i := 0; i < 4; i++ {
		if i != best && (second < 0 || values[i] > values[second]) {
			second = i
		}
	}
	q := Quat{vectors[0][best], vectors[1][best], vectors[2][best], vectors[3][best]}
	return RotationOf(q), values[best]-values[second] > 1e-12
}

// jacobi4 returns eigenvalues and eigenvectors (columns) of a symmetric 4 x 4 matrix by cyclic Jacobi rotations.
func jacobi4(a *[4][4]float64) (values [4]float64, v [4][4]float64) {
	for i := range v {
		v[i][i] = 1
	}
	for sweep := 0; sweep < 30; sweep++ {
		off := 0.0
		for p := 0; p < 4; p++ {
			for q := p + 1; q < 4; q++ {
				off += a[p][q] * a[p][q]
			}
		}
		if off < 1e-36 {
			break
		}
		for p := 0; p < 4; p++ {
			for q := p + 1; q < 4; q++ {
				if a[p][q] == 0 {
					continue
				}
				th := (a[q][q] - a[p][p]) / (2 * a[p][q])
				t := 1 / (math.Abs(th) + math.Sqrt(th*th+1))
				if th < 0 {
					t = -t
				}
				c := 1 / math.Sqrt(t*t+1)
				s := t * c
				for k := 0; k < 4; k++ {
					x, y := a[k][p], a[k][q]
					a[k][p], a[k][q] = c*x-s*y, s*x+c*y
				}
				for k := 0; k < 4; k++ {
					x, y := a[p][k], a[q][k]
					a[p][k], a[q][k] = c*x-s*y, s*x+c*y
					x, y = v[k][p], v[k][q]
					v[k][p], v[k][q] = c*x-s*y, s*x+c*y
				}
			}
		}
	}
	for i := range values {
		values[i] = a[i][i]
	}
	return values, v
}
