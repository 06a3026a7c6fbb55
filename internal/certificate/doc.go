// Package certificate tells whether an adjustment of relative poses may have settled in a wrong valley.
//
// A least-squares adjustment finds the bottom of the valley that it started in. For a cost near to the real one, with one weight for
// the rotation and one for the translation of each measurement,
//
//	sum kappa |R_j - R_i R_ij|^2 + tau |t_j - t_i - R_i t_ij|^2,   tau = 3 / tr C_t,  kappa = 3 / (2 tr C_phi)
//
// (in the plane 2 / tr C_t and 1 / (2 C_phi)), a point can be proved to be the lowest of all: the cost is tr Y'MY in the stacked rows
// Y = (t', R'), and where it is stationary the multipliers of R R' = I are known in closed form. With S the matrix M less
// these, S Y = 0, and if S has no negative eigenvalue no other poses cost less. 'Lagrangian Duality in 3D SLAM', IROS 2015; 'SE-Sync:
// A Certifiably Correct Algorithm for Synchronization over the Special Euclidean Group', International Journal of Robotics Research
// 38, 2019.
//
// [Certify] starts from given poses, goes to the bottom of this cost, and tests S there. What is certified is the starting basin of the
// real adjustment, never the map: where weights differ much by direction the two bottoms lie apart.
package certificate
