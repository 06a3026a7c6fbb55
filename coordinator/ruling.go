package coordinator

import (
	"fmt"
	"slices"
	"unicode/utf8"

	"selvage/internal/lie"
	"selvage/msgs"
)

// Ruling is what a person has decided on a tie: it comes before all evidence.
type Ruling struct {
	Verdict msgs.VerdictKind // Held: never given up; Refused: never takes part
	By      string           // who has decided
	Note    string           // why
}

// TieName names a tie by the robot that measured it and its id there.
type TieName struct{ Robot, ID string }

var verdictWord = map[msgs.VerdictKind]string{msgs.Held: "held", msgs.Refused: "refused", msgs.Open: "open"}

// text is how the reason of a verdict begins.
func (r *Ruling) text() string {
	return "ruled " + verdictWord[r.Verdict] + " by " + r.By + ": " + r.Note
}

// ruledOut tells whether a tie was ruled refused: it bears witness to nothing.
func (t *tie) ruledOut() bool { return t.ruled != nil && t.ruled.Verdict == msgs.Refused }

// rule lays the rulings over what the evidence made of the other ties.
func (c *Coordinator) rule(n *network, w *weighed) {
	w.believed, w.alone = slices.Clone(w.held), make([]opinion, len(w.held))
	joined := false
	for pass := range 2 { // what measures less than a pose cannot join two maps, so it comes second
		for i := range n.ties {
			t := &n.ties[i]
			if t.ruled == nil || t.regular != (pass == 0) {
				continue
			}
			reason := t.ruled.text()
			switch {
			case t.ruled.Verdict == msgs.Refused:
				t.judge(c.now, msgs.Refused, reason, msgs.Evidence{})
			case n.loose(i):
				t.judge(c.now, msgs.Open, reason+"; but "+looseReason, msgs.Evidence{})
			case t.wild():
				t.judge(c.now, msgs.Open, reason+"; but it claims more than can be measured", msgs.Evidence{})
			case !t.regular && w.island[t.from] != w.island[t.to]:
				t.judge(c.now, msgs.Open, reason+"; but it measures too little of a pose to join two maps", msgs.Evidence{})
			default:
				if t.regular && !c.cfg.HoldAll {
					w.alone[i] = opinion{verdictWord[t.finding.Verdict], t.finding.Reason, t.finding.Evidence}
				}
				t.judge(c.now, msgs.Held, reason, msgs.Evidence{})
				w.held[i] = true
				w.join(n, i)
				joined = true
			}
		}
	}
	if joined {
		w.island = n.islands(w.held)
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
		reason, e := t.ruled.text(), msgs.Evidence{}
		switch f := j.factor[i]; {
		case t.finding.Verdict == msgs.Held:
			e = msgs.Evidence{Statistic: j.ties.Chi2(f, &j.graph.Values), DoF: c.width(), Limit: c.limit}
			reason += fmt.Sprintf("; misclosure %.1f in the joint solution, limit %.1f", e.Statistic, e.Limit)
			if given > 0 {
				reason += fmt.Sprintf("; ties held by the evidence alone that contradict this solution: %d", given)
			}
			if w.alone[i].reason != "" {
				reason += "; the evidence alone: " + w.alone[i].verdict + ", " + w.alone[i].reason
			}
			if x := &w.alone[i].Evidence; x.DoF > 0 { // what the others say, before they gave way to the ruling
				e.Statistic, e.Places, e.Margin = x.Statistic, x.Places, x.Margin
			}
		case f >= 0:
			sigma, err := j.covariance()
			if err != nil {
				return err
			}
			e = msgs.Evidence{Statistic: j.ties.Innovation(f, &j.graph.Values, sigma, &t.cov), DoF: c.width(), Limit: c.limit}
			word := "agrees with"
			if e.Statistic >= e.Limit {
				word = "contradicts"
			}
			reason += fmt.Sprintf("; it %s the joint solution: misclosure %.1f, limit %.1f", word, e.Statistic, e.Limit)
		case t.regular:
			reason += "; nothing held connects its two robots, so nothing else speaks about it"
		}
		t.judge(c.now, t.finding.Verdict, clip(reason), e)
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
