package lie

import "math"

// SE2 is a rigid motion of the plane: rotation with cosine C and sine S, then translation X, Y in metres.
type SE2 struct{ X, Y, C, S float64 }

// Planar returns the motion of the plane that an SE3 with z = 0 and a rotation about z holds; other components are dropped.
func Planar(x *SE3) SE2 { return SE2{x.T[0], x.T[1], x.R[0], x.R[3]} }

// Spatial returns the same motion as an SE3.
func (x SE2) Spatial() SE3 {
	return SE3{Mat3{x.C, -x.S, 0, x.S, x.C, 0, 0, 0, 1}, [3]float64{x.X, x.Y, 0}}
}

// Exp2 returns the motion of the twist (x, y, theta), m and rad.
func Exp2(xi [3]float64) SE2 {
	th := xi[2]
	A, B, _ := sincCoefficients(th * th)
	a, b := A, B*th // sin th/th and (1 - cos th)/th
	s, c := math.Sincos(th)
	return SE2{a*xi[0] - b*xi[1], b*xi[0] + a*xi[1], c, s}
}

// Log returns the twist of x, its angle in [-pi, pi].
func (x SE2) Log() [3]float64 {
	th := math.Atan2(x.S, x.C)
	k, _ := cotCoefficients(th * th)
	c := 1 - k*th*th // (th/2) cot(th/2)
	h := th / 2
	return [3]float64{c*x.X + h*x.Y, c*x.Y - h*x.X, th}
}

// Mul returns x y: first y, then x.
func (x SE2) Mul(y SE2) SE2 {
	return SE2{x.X + x.C*y.X - x.S*y.Y, x.Y + x.S*y.X + x.C*y.Y, x.C*y.C - x.S*y.S, x.S*y.C + x.C*y.S}
}

// Inv returns the inverse motion.
func (x SE2) Inv() SE2 {
	return SE2{-x.C*x.X - x.S*x.Y, x.S*x.X - x.C*x.Y, x.C, -x.S}
}

// Between returns x^-1 y.
func (x SE2) Between(y SE2) SE2 {
	dx, dy := y.X-x.X, y.Y-x.Y
	return SE2{x.C*dx + x.S*dy, x.C*dy - x.S*dx, x.C*y.C + x.S*y.S, x.C*y.S - x.S*y.C}
}

// Plus returns x Exp(xi), its rotation cleaned of rounding.
func (x SE2) Plus(xi [3]float64) SE2 {
	y := x.Mul(Exp2(xi))
	n := 1.5 - 0.5*(y.C*y.C+y.S*y.S)
	y.C *= n
	y.S *= n
	return y
}

// Adjoint returns Ad(X), 3 x 3.
func (x SE2) Adjoint() Mat3 {
	return Mat3{x.C, -x.S, x.Y, x.S, x.C, -x.X, 0, 0, 1}
}

// Jr2 returns the right Jacobian of Exp2 at (x, y, theta), 3 x 3.
func Jr2(xi [3]float64) Mat3 {
	th := xi[2]
	A, B, C := sincCoefficients(th * th)
	a, b := A, B*th
	// column 3: integral of the moving translation; C th^2 = 1 - A
	c := C * th
	return Mat3{
		a, b, c*xi[0] - B*xi[1],
		-b, a, B*xi[0] + c*xi[1],
		0, 0, 1,
	}
}

// JrInv2 returns the inverse of the right Jacobian: I + ad/2 + k ad^2 with ad = [[0 -th y] [th 0 -x] [0 0 0]].
func JrInv2(xi [3]float64) Mat3 {
	x, y, th := xi[0], xi[1], xi[2]
	k, _ := cotCoefficients(th * th)
	d := 1 - k*th*th
	return Mat3{
		d, -th / 2, y/2 + k*th*x,
		th / 2, d, -x/2 + k*th*y,
		0, 0, 1,
	}
}
