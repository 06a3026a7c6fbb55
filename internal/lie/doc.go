// Package lie holds the rotations and rigid motions of Selvage: SE(3) for surveys in space and its subgroup SE(2) for
// surveys in the plane, with exponential, logarithm, adjoint and right Jacobians.
//
// Conventions, for the whole project:
//
//   - Metres and radians, right-handed axes. A pose a_from_b carries the coordinates of a point in frame b to frame a:
//     p_a = R p_b + T. Products are read right to left: a_from_c = a_from_b.Mul(b_from_c).
//   - A tangent vector is (rho, phi): three metres, then three radians, [x y z rx ry rz]. In the plane it is [x y rz].
//   - Perturbations act from the right: X <- X Exp(xi). Jacobians named right (Jr) belong to this choice:
//     Exp(xi + d) = Exp(xi) Exp(Jr(xi) d) to first order.
//   - Rotation angles returned by a logarithm lie in [0, pi]; it is taken through the unit quaternion, so it keeps full
//     accuracy up to pi (at pi itself either of the two axes is right).
//   - Quaternions are x, y, z, w with w >= 0 when this package makes them.
//   - Matrices are row-major arrays.
//
// A planar pose is held as an SE3 with z = 0 and a rotation about z; [SE2] is the same motion in the form that the inner
// loops of planar problems use.
//
// Formulas after Sola, Deray, Atchuthan, "A micro Lie theory for state estimation in robotics", 2018, and Barfoot, "State
// Estimation for Robotics", Cambridge University Press, 2017.
package lie
