package coordinator

import (
	"fmt"

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

// text is how the reason of a verdict begins.
func (r *Ruling) text() string {
	verdict := "held"
	if r.Verdict == msgs.Refused {
		verdict = "refused"
	}
	return "ruled " + verdict + " by " + r.By + ": " + r.Note
}

// rule lays the rulings over what the evidence made of the other ties.
func (c *Coordinator) rule(n *network, w *weighed) {
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

// weighRulings says what the joint solution makes of each tie that was ruled on: what the ruling costs.
func (c *Coordinator) weighRulings(j *joint) error {
	for i := range j.n.ties {
		t := &j.n.ties[i]
		if t.ruled == nil || t.finding.Verdict == msgs.Open {
			continue
		}
		f := j.factor[i]
		if f < 0 {
			if t.regular {
				t.judge(c.now, msgs.Refused, t.ruled.text()+"; nothing held connects its two robots, so nothing else speaks about it", msgs.Evidence{})
			}
			continue
		}
		chi2 := j.ties.Chi2(f, &j.graph.Values)
		if t.finding.Verdict == msgs.Refused {
			sigma, err := j.covariance()
			if err != nil {
				return err
			}
			chi2 = j.ties.Innovation(f, &j.graph.Values, sigma, &t.cov)
		}
		word := "agrees with"
		if chi2 >= c.limit {
			word = "contradicts"
		}
		t.judge(c.now, t.finding.Verdict, fmt.Sprintf("%s; it %s the joint solution: misclosure %.1f, limit %.1f", t.ruled.text(), word, chi2, c.limit),
			msgs.Evidence{Statistic: chi2, DoF: c.width(), Limit: c.limit})
	}
	return nil
}
