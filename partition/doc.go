// Package partition makes small things of large pose graphs: it condenses the graph of one robot onto the poses that other
// robots have measured against, and it splits one large graph into pieces with few poses in common.
//
// # Condensing
//
// A robot's pose graph, linearised at its present poses, is a sum of quadratic terms, one for every measurement. [Condense]
// eliminates poses one at a time by the Schur complement: what all terms around a pose say about its neighbours becomes a
// single term over those neighbours, a clique. Poses that an inter-robot measurement touches (separators) are never
// eliminated. Of the others, some are better kept: without them a few small cliques would grow into a large one. The poses
// that remain are the junctions. Any choice of them is exact; it decides only the size of the summary and the speed at
// which robots and coordinator agree.
//
// Every term is relative: moving all poses together changes nothing. A term with matrix H therefore satisfies H N = 0, where
// N stacks Ad(X_k^-1), the tangents of one common motion. So the rows and columns of one pose of a clique, its reference,
// hold nothing that the others do not say, and they are left out of it. Read as a function of
//
//	e_k = Log((Xbar_k0^-1 Xbar_k)^-1 X_k0^-1 X_k),   cost 1/2 e'He + b'e,
//
// with k0 the reference and Xbar the poses at which the graph was linearised, a clique depends on poses relative to each
// other only. The frame in which the robot works never enters.
//
// [Condense] needs no poses. Where they are at hand, [CondenseAt] is the better choice: with them it loses no digits between
// measurements of very different strength. [Condensed.Interior] goes the other way, from a step of the junctions to the step of all
// poses, and [Condensed.NullResidual] checks H N = 0.
//
// A graph may have points beside poses ([CondensePoints]), such as marks that a robot has seen. Under a common motion with the tangent tau in
// the frame a point p moves by [I, -skew(p)] tau, and these are its rows of N. The reference of a clique is a pose, and a point in it is
// read as e_p = R_k0'(p - t_k0) - Rbar_k0'(pbar - tbar_k0). A mark that one robot alone knows is eliminated; one that several know is
// a separator of each.
//
// Elimination and the term for term assembly follow George, "Nested dissection of a regular finite element mesh", SIAM J.
// Numerical Analysis 10(2), 1973, and Duff and Reid, "The multifrontal solution of indefinite sparse symmetric linear
// equations", ACM Trans. Mathematical Software 9(3), 1983.
//
// # Conventions
//
// Tangents are right perturbations, X <- X Exp(d), of D numbers: six in space (x, y, z, rx, ry, rz), three in the plane
// (x, y, rz); metres, then radians. Matrices are row-major. Poses are numbered 0..n-1 in the order of their keyframes.
// Results depend on the input alone, never on the order of a map or the number of processors.
package partition
