// Package survey reads, checks and writes the survey folder: everything that
// was recorded in one outing, as plain CSV tables and one YAML file.
//
//	survey.yaml               what and where: dimension, datum, robots and their sessions
//	robots/ID/keyframes.csv   the keyframes of one robot, in the frame of their session
//	robots/ID/relative.csv    odometry and loop closures of that robot
//	robots/ID/sightings.csv   optional: where that robot has seen marks
//	marks.csv                 optional: marks, control points and check points
//	ties.csv                  measurements between robots (or between sessions of one robot)
//	rulings.csv               optional: what a person has decided on ties, robots and sessions
//	truth.csv                 optional: true poses, never used in fitting
//	results/                  what was computed from the survey; ignored on reading
//
// A table may be gzipped (name.csv.gz). Lengths are metres, angles radians,
// stamps integer nanoseconds, quaternions x, y, z, w. A pose is that of the
// second frame in the first. The tangent of a pose has the order
// x, y, z, rx, ry, rz and is a right perturbation: it moves the second frame
// along its own axes. A planar survey (dimension 2) keeps z, qx and qy at zero
// and uses the components x, y, rz.
//
// # All or nothing
//
// Read returns a survey or an error, never a part of one. What is wrong with
// the content is returned as [*Violations]: each names file, line and column,
// what was found and what was expected, up to a cap per file, with an exact
// total. Write checks what it has written by reading it before it puts the
// folder in place, so that Read accepts whatever Write leaves behind.
//
// # Numbers
//
// Floats are written with the shortest digits that read back to the same
// float64, and Read changes none: a quaternion whose norm is within 1e-6 of 1
// is accepted as it stands, so whoever turns it into a rotation normalises it.
//
// # Sights
//
// A tie of kind pose has the pose of the far base_link in the near one. Any other
// kind, and every sighting of a mark, is a [Sight] of a point: position (x_m, y_m,
// z_m in the frame of the sensor, with sx_m, sy_m, sz_m and c_x_y, c_x_z, c_y_z),
// range_bearing (range_m, bearing_rad counter-clockwise from x forward,
// elevation_rad, with s_range_m, s_bearing_rad, s_elevation_rad), range or
// bearing. Columns that do not belong to the kind of a row are empty or absent;
// in the plane there is no elevation. The columns sensor and target name
// mountings; empty is base_link.
//
// A sighting is at a keyframe or at a moment, one of the two, and so is either
// end of a tie, but for the near end of a tie of kind pose, which is a keyframe.
//
// # Uncertainty
//
// A measurement carries sigmas and correlations, not an information matrix
// (see [Cov]). An infinite sigma marks a component that was not measured; it
// has no correlation with any other and no weight. The correlation matrix of
// the measured components must be positive definite: a smallest eigenvalue
// below -1e-9 of the largest is reported as not positive semidefinite, one that
// is zero within rounding as singular, because a direction known without any
// error cannot be weighted.
package survey

// Limits that keep hostile or damaged input from using up memory. They are
// generous for real surveys.
const (
	maxTableBytes = 1 << 30 // of one table, after decompression
	maxTableRows  = 4 << 20
	maxLineBytes  = 32 << 10
	maxYAMLBytes  = 256 << 10
	maxRobots     = 1024
	maxSessions   = 1024 // of one robot
	maxMounts     = 256  // on one robot
	maxNotes      = 64 << 10
	maxText       = 128 // bytes of a name or source
	maxRobotID    = 32  // characters
	maxTieID      = 128 // characters
	maxNote       = 256 // bytes of the note of a ruling

	maxMetres = 1e9   // coordinate, absolute
	minSigma  = 1e-12 // m or rad
	maxSigma  = 1e12
	quatTol   = 1e-6 // of | |q| - 1 |
	psdTol    = 1e-9 // smallest eigenvalue over largest, negative
)
