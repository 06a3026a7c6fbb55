package coordinator

import "selvage/msgs"

// Change is one turn in the history of a verdict. What is told again without a change is none.
type Change struct {
	AtNS     int64 // of the solution that brought it, on the clock of the base
	Epoch    msgs.Epoch
	Old, New msgs.VerdictKind // Old is zero in the first; both are the same where a ruling came or went and only the reason changed
	Reason   string
}

// maxTurns bounds the changes kept beyond the first verdict on each tie: a robot may send ties that turn with every solution. Once so
// many are kept, a change takes the place of the one before it.
const maxTurns = 1 << 18

// record notes the present verdict on a tie as that of the newest epoch, and tells whether that is a change.
func (c *Coordinator) record(t *tie) bool {
	f, n := &t.finding, len(t.history)
	now := Change{AtNS: c.now, Epoch: c.Epoch(), New: f.Verdict, Reason: f.Reason}
	if n > 0 {
		last := &t.history[n-1]
		if last.New == f.Verdict && t.told == t.ruled {
			return false
		}
		now.Old = last.New
	}
	if now.Old != now.New {
		f.SinceNS = c.now
	}
	t.told = t.ruled
	switch {
	case n == 0:
		t.history = append(t.history, now)
	case c.turns < maxTurns:
		c.turns++
		t.history = append(t.history, now)
	default:
		now.Old = t.history[n-1].Old
		t.history[n-1] = now
	}
	return true
}

// History returns the verdicts on every tie from the first on, in the order of [Coordinator.Findings]; none on a tie that no solution
// has seen. Its slices belong to the coordinator.
func (c *Coordinator) History() [][]Change {
	out := make([][]Change, len(c.order))
	for i, t := range c.order {
		out[i] = t.history[:len(t.history):len(t.history)]
	}
	return out
}
