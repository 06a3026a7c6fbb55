package coordinator

import "fmt"

// Why a tie that the evidence did not weigh is open, and what would settle it.

func waitingFor(robot string) string {
	return "waiting for the separator of " + robot + ", which its next summary is to bring"
}

func strayIn(robot string) string {
	return "touches a part of the map of " + robot + " that is not connected with the rest of it; odometry or a loop closure of " + robot + " that connects them would settle it"
}

func ofOneSession(robot string) string {
	return "both ends lie in one session: it would be settled as a loop closure, by " + robot + " itself"
}

// looseReason names the robot whose map leaves a junction free.
func (n *network) looseReason(i int) string {
	u := &n.units[n.ties[i].from]
	if u.model.err == nil {
		u = &n.units[n.ties[i].to]
	}
	return "the map of " + u.id.robot + " does not hold together; a summary of " + u.id.robot + " in which every keyframe is measured in all directions would settle it"
}

// wildReason speaks of the sigma that [strongest] stands for.
const wildReason = "claims more than can be measured; sigmas above a nanometre and a nanoradian would settle it"

// unjoined explains a tie that was judged by what is held no more.
func (c *Coordinator) unjoined(n *network, i int) string {
	t := &n.ties[i]
	return fmt.Sprintf("nothing held connects its two robots: ties between %s and %s at %d places, more than %g m along both tracks from %s and from each other, would settle it",
		n.units[t.from].id.robot, n.units[t.to].id.robot, c.cfg.Evidence.BridgeMargin, c.cfg.Evidence.PlaceM, t.msg.ID)
}

// lessThanPose explains a tie that leaves a component of a pose free.
func (n *network) lessThanPose(i int) string {
	t := &n.ties[i]
	return fmt.Sprintf("measures too little of a pose to be weighed; ties of whole poses that join %s and %s would settle it", n.units[t.from].id.robot, n.units[t.to].id.robot)
}
