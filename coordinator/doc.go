// Package coordinator is the core of what runs at the base: it collects the robots' summaries and ties, decides which ties to
// believe, solves for the junctions of all robots at once and sends every robot its correction.
//
// Like the agent's, the core is a state machine: [Coordinator.Handle] takes a message or the tick of a clock at a moment and returns
// what to publish. It starts nothing, reads no clock and draws no random number; the same events give the same effects.
//
// What happens on a tick when something changed:
//
//  1. The newest summaries are laid out: one unit for each session, one variable for each junction.
//  2. Ties whose ends are junctions take part; the ends that are missing are wanted from their robots.
//  3. Package evidence weighs the ties without any prior on the frames: which are held, which units share a datum, and where their
//     frames lie roughly. (With HoldAll every tie is taken as true.) What these join is joined further by ties that are less than a
//     pose, by marks that several sessions know, and with the control marks (evidence.Meet); a mark is one variable of its island.
//  4. The joint problem, cliques and held ties, is solved; ties that stand out are given up by graduated non-convexity, and every
//     tie within an island is tested against the prediction of the others.
//  5. The solution is a new epoch: a correction to each robot, a verdict for each tie whose verdict changed.
//
// Each island of joined sessions has a datum of its own, fixed by one junction of one session that keeps its pose; when islands
// merge, the older datum stays. An island that control marks hold stands in their coordinates, and no junction is fixed. In space, a new
// datum is carried by a session that knows the vertical, if there is one, and levels count in such a datum only.
//
// What is shown is one epoch ([Coordinator.Map]), never a mixture.
package coordinator
