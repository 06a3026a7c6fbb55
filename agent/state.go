package agent

import "selvage/msgs"

// State is what an agent has to remember through a restart besides what its front end told it. It holds for one journal.
type State struct {
	Incarnation uint64     // the highest of a base
	Term        uint64     // the highest lease term
	Applied     msgs.Epoch // of the newest correction applied
	Version     uint64     // of the newest summary; nothing of it may be published before this is remembered
	Safe        uint64     // the base holds the records up to this one
}

// State returns what is to be remembered now.
func (a *Agent) State() State {
	s := State{Incarnation: a.incarnation, Term: a.term, Applied: a.applied, Version: a.version, Safe: a.safe}
	if s.Applied.Compare(a.floor) < 0 {
		s.Applied = a.floor
	}
	return s
}

// Resume gives an agent, when it has been told again all that its front end told it, what it is to remember: no base and no term
// below is heard again, nor a correction that is older, and its next summary has a higher version. The newest correction itself is
// applied again, for the poses are those of the front end.
func (a *Agent) Resume(s State) {
	a.incarnation, a.term, a.floor, a.version = s.Incarnation, s.Term, s.Applied, s.Version
	a.safe = min(s.Safe, a.newest)
}
