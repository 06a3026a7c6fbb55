// Package msgs is the wire of a Selvage fleet: which messages cross the bus between the robots and the base, how they are
// written, and what a reader refuses.
//
// Every kind of message is a plain Go type with a Marshal method and a Decode function. Both apply the same rules, so what
// one accepts the other does too. The package is pure: no network, no clock, no randomness.
//
// # Who says what
//
//	up.FLEET.ROBOT.hb                 Heartbeat   never stored
//	up.FLEET.ROBOT.tie                Tie         all kept
//	up.FLEET.ROBOT.summary            Summary     newest kept
//	up.FLEET.ROBOT.summary.SLOT.N     a chunk of a large summary, SLOT a or b
//	up.FLEET.ROBOT.summary.head       says which chunks make the newest large summary
//	down.FLEET.ROBOT.want             Want        newest kept
//	down.FLEET.ROBOT.corr             Correction  newest kept
//	down.FLEET.ROBOT.verdict          Verdict     all kept
//	down.FLEET._lease                 Lease       newest kept
//	rule.FLEET                        Ruling      all kept; from a person's tool
//
// A summary is always whole: it refers to no older one. Of a summary in one message and a summary in chunks the one with
// the higher version counts.
//
// # Units and frames
//
// Metres, radians, nanoseconds. A tangent vector is ordered x, y, z, rx, ry, rz in space (Dim 6) and x, y, rz in the plane
// (Dim 3), translation first, and perturbs a pose from the right. Poses of a summary are in the frame of their session,
// poses of a correction in the datum of their island; the pose of a tie takes coordinates of To into the frame of From.
// Matrices are row-major.
//
// # Bytes
//
// The schema is selvage.proto. Beyond it:
//   - The pose of a tie is seven float64, and arrives bit for bit; its information is the float64 factor of a matrix, and
//     arrives to 1e-15 of sqrt(m_ii m_jj).
//   - Other poses are Dim float64: position and rotation vector, so that a quaternion read from the bus is of length one by
//     construction.
//   - Other matrices are the float32 rows of L with L L' = M, and so have no negative eigenvalue whatever was sent. L comes
//     from the Cholesky factor of the unit-diagonal scaling of M, each row multiplied by its scale.
//   - A sight is as exact as the pose of a tie; the place of a point is two or three float64. In a matrix a point has three rows in
//     the plane too, the third with a pivot of its own.
//   - Ids and stamps are differences to the one before them.
//
// A clique of k junctions and m points with d = Dim (k-1) + 3 m costs 4 (d(d+1)/2 + d) + k + 1 bytes, m + 1 more where points are, up to k more when a part has over 128
// junctions. A junction costs 8 Dim + 4 bytes and two varints, of which the step of the stamp takes about 5.
//
// # Versions
//
// Fields 1 and 2 of every message are the major and the minor number of the format. A reader passes over the fields of a
// newer minor number that it does not know and refuses a newer major number with a VersionError, whose text is for people.
//
// # Signatures
//
// In a fleet that signs, a robot signs what it publishes and the base what it publishes, [Sign] and [Verify]: Ed25519 over the
// byte ff, "selvage 1", a zero byte, the subject, a zero byte, and the message without its signature. The signature is field 100,
// the last of the message. A summary is signed for the subject up.FLEET.ROBOT.summary, also one that goes in chunks, whose
// chunks and head are signed besides. What was signed for one subject is worth nothing on another.
//
// # What is refused
//
// Everything that is too large, not finite, of the wrong size, out of order, out of range or named against the rules, with
// a FieldError that says where, what was found and what was expected. Nothing is half decoded. A message of n bytes never
// takes more than a small multiple of n of memory.
package msgs
