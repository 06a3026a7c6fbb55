// Package posegraph holds pose graphs and adjusts them: the poses of one robot, of a fleet in one piece, or the junctions of
// all summaries at the coordinator.
//
// A [Graph] is a list of variables and of factor sets. A factor set is a batch of factors of one kind, so that the inner loops
// run over plain arrays: [Between] for relative-pose measurements, [Cliques] for condensed summaries. A new kind of factor is a new
// type with the methods of [FactorSet]; graph and solver stay as they are.
//
// The cost is F = 1/2 sum w r' Omega r. The residual of a relative pose Z of j seen from i is r = Log(Z^-1 X_i^-1 X_j), the group
// logarithm, in metres and radians; Omega is its information matrix.
//
// A [Solver] belongs to one structure: it orders and analyses once, then linearises, factorises and steps without allocating. The
// method is Gauss-Newton, damped after Levenberg (1944) and Marquardt (1963) only when a step would raise the cost. [Chordal] and
// [SpanningTree] give starting values from the measurements alone.
//
// Beside poses a graph may have points: marks that robots see again, and control points ([PointPriors]), the only factors that tie it
// to a datum. [Sightings] are measurements that are less than a pose, of points or of other robots: position, range with bearing,
// or one of the two; [MarkCliques] are condensed factors over poses and points.
//
// A planar survey (Dim 3) keeps its poses as rigid motions of space with z = 0 and a rotation about z; its tangents have the three
// components x, y, rz.
package posegraph
