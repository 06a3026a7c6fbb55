// Package bus carries bytes between the base and the robots: a NATS server inside the process of the base, and clients.
// It knows subjects and streams, and nothing of what is in a message.
//
// # What is kept
//
// [Client.Prepare], which only the base calls, makes these streams of a fleet:
//
//	TIE+FLEET+ROBOT   up.FLEET.ROBOT.tie                         all, up to a quota, then refused
//	SUMMARY+FLEET     up.FLEET.*.summary and below               the newest of each subject
//	CORR+FLEET        down.FLEET.*.corr, .want, down.FLEET._lease the newest of each subject
//	VERDICT+FLEET     down.FLEET.*.verdict                       all, up to a quota, then refused
//	RULE+FLEET        rule.FLEET                                 all, up to a quota, then refused; from people, by way of the base
//
// Heartbeats are not kept. A robot has a tie stream of its own because message ids are shared by a whole stream: an id that
// another robot used first would be acknowledged and not stored.
//
// # Who may do what
//
// A server with an [Access] talks TLS and lets in the base and the robots it is told of, each by its NKey; a robot can publish on its
// own subjects and read what is for it. Without one everybody in reach may do everything.
//
// # What may be relied on
//
// A message whose Publish returned nil is with the server's operating system. It outlives the death of the server's
// process; the disk has it a second later. A robot that must not lose a record keeps it until the base says, in a message
// of its own, that it is safe.
//
// Deliveries of one subject come in the order they were stored, save that a message which its handler refused comes again
// later. Whoever reads must be ready for a message to come twice.
//
// While the link is down every publish fails at once. Nothing is buffered behind the caller's back, since a stale message
// that arrives late is worse than none.
package bus
