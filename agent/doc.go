// Package agent is the core of what runs on a robot: it keeps the robot's pose graph, publishes a condensed summary of it and
// the robot's ties, and carries the base's corrections into every pose of the robot's own map.
//
// The core is a state machine. [Agent.Handle] takes one event at a moment (a keyframe, a measurement, a message from the base, the
// tick of a clock) and returns effects: messages to publish. It starts nothing, reads no clock and draws no random number, so
// the same events give the same effects, byte for byte, on a robot, in a container and in a simulation.
//
// What it does with an event:
//
//	keyframe, relative pose     into the pose graph of their session
//	sighting of a mark          into the graph of its session, with the mark as a point; a moment between keyframes becomes one
//	                            by splitting the odometry, when that has come
//	tie                         numbered, kept until the base says it is safe, published; its keyframe becomes a separator
//	want                        names separators and marks the base needs, records it misses, and the number below which all is safe
//	a base of a new incarnation its store is empty: nothing is safe any more, ties and summary are said again
//	correction                  junctions go where the base found them, interior poses and marks follow by a solve of their own; the
//	                            robot's frame keeps its place, where it stands in the datum is kept beside it
//	tick                        what is due: ties again that are not safe yet, a new summary, the old one again, a heartbeat
//
// A summary is due when the graph changed and the traffic allows it (see [Config]), or when a correction moved the robot so far
// that its linearisation matters: when condensing again would change the cost by more than three parts in 1e12. Otherwise the
// correction is answered by a heartbeat.
//
// Loop closures may be false, and a false one would bend the map before it reaches the base: whenever the map is brought up to date
// they are judged anew against the robot's own odometry and each other, and only those that are held have weight ([Agent.Closures]).
//
// Sightings of marks may name the wrong one. Whenever the robot's map is brought to its own optimum they are decided anew by what the
// robot itself has measured, and only what is held takes part ([Agent.Sightings]). A mark takes part while the sightings of it that are
// held place it. Of its marks a summary tells the names; those that the base asks for, because others have seen them too, stay in the summary
// as points. What a front end knows of the vertical ([Config.Level]) is told beside the summary and not in it, for a summary
// says nothing of where its frame lies.
//
// The robot's own poses never jump: they stay in the session's frame, and [Agent.Tracks] gives them there together with the
// transform into the datum.
package agent
