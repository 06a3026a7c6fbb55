package coordinator

import (
	"fmt"
	"slices"
	"unicode/utf8"

	"selvage/internal/lie"
	"selvage/msgs"
)

// subject is what a ruling is on.
type subject struct {
	target  msgs.Target
	robot   string
	session uint32
	tie     string
}

// maxRulings bounds what people can make the base remember.
const maxRulings = 1 << 18

// Rule takes what a person has decided at the time nowNS; the next solution follows it. The last ruling on a tie, robot or session
// counts, and msgs.Open withdraws it. A tie is ruled on by itself, else with a session, else with a robot at one of its ends; where
// the two ends are ruled differently, it is refused. A ruling on what has not come yet waits for it. An error says why a ruling
// was not taken; nothing has changed then.
func (c *Coordinator) Rule(nowNS int64, r msgs.Ruling) error {
	c.now = max(c.now, nowNS)
	if err := r.Check(); err != nil {
		return err
	}
	if r.Fleet != c.cfg.Fleet {
		return fmt.Errorf("ruling for fleet %s came to fleet %s", r.Fleet, c.cfg.Fleet)
	}
	on := subject{r.Target, r.Robot, r.Session, r.Tie}
	was := c.rulings[on]
	switch {
	case r.Verdict == msgs.Open:
		delete(c.rulings, on)
	case was == nil && len(c.rulings) == maxRulings:
		return fmt.Errorf("ruling on %s: %d others stand, which are the most", r.On(), maxRulings)
	case was != nil && was.Verdict == r.Verdict && was.By == r.By && was.Note == r.Note:
		return nil // said again
	default:
		c.rulings[on] = &r
	}
	changed := false
	for _, t := range c.order {
		if ruled := c.rulingOn(t.msg); ruled != t.ruled {
			t.ruled, changed = ruled, true
		}
	}
	if changed {
		c.dirty = true
		c.revision++
	}
	return nil
}

// rulingOnUnit returns the ruling on a session, or else on its robot.
func (c *Coordinator) rulingOnUnit(u unitID) *msgs.Ruling {
	if r := c.rulings[subject{target: msgs.OnSession, robot: u.robot, session: u.session}]; r != nil {
		return r
	}
	return c.rulings[subject{target: msgs.OnRobot, robot: u.robot}]
}

// rulingOn returns the ruling that counts for a tie, nil for none.
func (c *Coordinator) rulingOn(t *msgs.Tie) *msgs.Ruling {
	if len(c.rulings) == 0 {
		return nil
	}
	if r := c.rulings[subject{target: msgs.OnTie, robot: t.Header.Robot, tie: t.ID}]; r != nil {
		return r
	}
	near, far := c.rulingOnUnit(unitID{t.From.Robot, t.From.Session}), c.rulingOnUnit(unitID{t.To.Robot, t.To.Session})
	if near == nil || far != nil && far.Verdict == msgs.Refused {
		return far
	}
	return near
}

// ruledText is how the reason of a verdict begins.
func ruledText(r *msgs.Ruling) string {
	by := r.By
	if r.Target != msgs.OnTie {
		by += " (" + r.On() + ")"
	}
	return "ruled " + r.Verdict.String() + " by " + by + ": " + r.Note
}

// ruledOut tells whether a tie was ruled refused: it bears witness to nothing.
func (t *tie) ruledOut() bool { return t.ruled != nil && t.ruled.Verdict == msgs.Refused }

// overrule lays the rulings over what the evidence made of the other ties.
func (c *Coordinator) overrule(n *network, w *weighed) {
	w.believed, w.alone = slices.Clone(w.held), make([]opinion, len(w.held))
	joined := false
	for pass := range 2 { // what measures less than a pose cannot join two maps, so it comes second
		if pass == 1 {
			if joined {
				w.island = n.islands(w.held)
			}
			c.align(n, w)
			if c.cfg.HoldAll {
				c.holdSights(n, w)
			}
		}
		for i := range n.ties {
			t := &n.ties[i]
			if t.ruled == nil || t.regular != (pass == 0) {
				continue
			}
			reason := ruledText(t.ruled)
			switch {
			case t.ruled.Verdict == msgs.Refused:
				t.judge(msgs.Refused, reason, msgs.Evidence{})
			case n.loose(i):
				t.judge(msgs.Open, reason+"; but "+n.looseReason(i), msgs.Evidence{})
			case t.wild():
				t.judge(msgs.Open, reason+"; but it "+wildReason, msgs.Evidence{})
			case !t.regular && w.island[t.from] != w.island[t.to]:
				t.judge(msgs.Open, reason+"; but it measures too little of a pose to join two maps", msgs.Evidence{})
			default:
				if t.regular && !c.cfg.HoldAll {
					w.alone[i] = opinion{t.finding.Verdict.String(), t.finding.Reason, t.finding.Evidence}
				}
				t.judge(msgs.Held, reason, msgs.Evidence{})
				w.held[i] = true
				w.join(n, i)
				joined = true
			}
		}
	}
	if joined {
		w.island = w.islands(n)
	}
}

// join lays the island of the far end of tie i against that of its near end, as the tie has it.
func (w *weighed) join(n *network, i int) {
	t := &n.ties[i]
	to, at := w.island[t.from], w.island[t.to]
	if to == at {
		return
	}
	var move lie.SE3
	if w.start != nil {
		near := w.start[t.from].Mul(n.units[t.from].model.poses[t.fromNode]).Mul(t.z)
		move = near.Mul(w.start[t.to].Mul(n.units[t.to].model.poses[t.toNode]).Inv())
	}
	for u := range w.island {
		if w.island[u] != at {
			continue
		}
		w.island[u] = to
		if w.start != nil {
			w.start[u] = move.Mul(w.start[u])
		}
	}
}

// weighRulings says what speaks for and against each ruling: what it costs.
func (c *Coordinator) weighRulings(j *joint, w *weighed) error {
	given := 0
	for i, believed := range w.believed {
		if believed && !w.held[i] && j.n.ties[i].ruled == nil {
			given++
		}
	}
	for i := range j.n.ties {
		t := &j.n.ties[i]
		if t.ruled == nil || t.finding.Verdict == msgs.Open {
			continue
		}
		reason, e := ruledText(t.ruled), msgs.Evidence{}
		switch f := j.factor[i]; {
		case t.finding.Verdict == msgs.Held:
			e = msgs.Evidence{Statistic: j.chi2(i)}
			e.Limit, e.DoF = c.limitOf(t.tie)
			reason += fmt.Sprintf("; misclosure %.1f in the joint solution, limit %.1f", e.Statistic, e.Limit)
			if given > 0 {
				reason += fmt.Sprintf("; ties held by the evidence alone that contradict this solution: %d", given)
			}
			if w.alone[i].reason != "" {
				reason += "; the evidence alone: " + w.alone[i].verdict + ", " + w.alone[i].reason
			}
			if x := &w.alone[i].Evidence; x.DoF > 0 { // what the others say, before they gave way to the ruling
				e.Statistic, e.Limit, e.Places, e.Margin = x.Statistic, x.Limit, x.Places, x.Margin
			}
		case f >= 0:
			sigma, err := j.covariance()
			if err != nil {
				return err
			}
			e = msgs.Evidence{Statistic: j.innovation(i, sigma)}
			e.Limit, e.DoF = c.limitOf(t.tie)
			word := "agrees with"
			if e.Statistic >= e.Limit {
				word = "contradicts"
			}
			reason += fmt.Sprintf("; it %s the joint solution: misclosure %.1f, limit %.1f", word, e.Statistic, e.Limit)
		case t.regular:
			reason += "; nothing held connects its two robots, so nothing else speaks about it"
		}
		t.judge(t.finding.Verdict, reason, e)
	}
	return nil
}

// opinion is what the evidence alone says of a tie that was ruled held.
type opinion struct {
	verdict, reason string
	msgs.Evidence
}

// clip cuts a reason to what a verdict carries.
func clip(s string) string {
	if len(s) <= msgs.MaxReason {
		return s
	}
	at := msgs.MaxReason - len("...")
	for !utf8.RuneStart(s[at]) {
		at--
	}
	return s[:at] + "..."
}
