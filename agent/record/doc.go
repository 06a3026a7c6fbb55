// Package record lets an agent outlive its process: what the front end told it goes into a journal, and from that the agent is made
// again.
//
// [Store.Handle] stands before [agent.Agent.Handle]. It puts every event of the front end that the agent has taken, with the time,
// behind the others, and returns the number of the last one. Nothing that an event has led to may leave the robot before
// [Store.Commit] has made that number durable, together with the [agent.State].
//
// [Open] hands the events to a new agent at the times they had. The agent is a state machine, so every tie gets the number and
// the bytes that it had; the number is recorded with the tie, and one that differs is an error. Messages of the base are not recorded:
// the newest are on the bus. Until they are heard the poses are those of the robot alone.
//
// The time of day may be earlier after a restart, on a robot whose clock has no battery: the store never hands the agent a time
// before that of its newest event.
//
// # Format
//
// Little-endian. The kind of a record is that of the journal: 1 keyframe, 2 relative pose, 3 tie, 4 sighting, 255 the beginning. The
// payload begins with the version of its kind, one byte, now 1, and but for the beginning the time, 8 bytes. Then come the fields in
// the order of the type: integers in full width, a truth value as a byte 0 or 1, text as its length in two bytes and its bytes, an
// optional part behind a truth value. Numbers that are mostly zero are written as a bit for each, lowest first, that tells which are
// not +0, and these: of a pose the rotation, row by row, and the translation; of a symmetric matrix the upper triangle, behind a
// byte 1, of another the whole, behind a byte 0. A tie has its number before the fields. The beginning has the dimension of the
// survey, one byte.
//
// There is one way to write an event, and what is written in another is refused.
package record
