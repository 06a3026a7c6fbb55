package scenarios

import (
	"fmt"

	"selvage/coordinator"
	"selvage/internal/survey"
	"selvage/msgs"
)

// rulings returns what a person has decided on the ties of a survey, as the coordinator takes it.
func rulings(s *survey.Survey) map[coordinator.TieName]coordinator.Ruling {
	out := map[coordinator.TieName]coordinator.Ruling{}
	for i, r := range s.TieRulings() {
		if r == nil {
			continue
		}
		ruling := coordinator.Ruling{Verdict: msgs.Held, By: r.By, Note: r.Note}
		if r.Verdict == survey.RuledRefused {
			ruling.Verdict = msgs.Refused
		}
		if r.Target != survey.OnTie {
			ruling.By += " (" + r.On() + ")"
		}
		out[coordinator.TieName{Robot: s.Ties[i].FromRobot, ID: s.Ties[i].ID}] = ruling
	}
	return out
}

// ruled lists what a person has decided and what it costs: a ruling on a tie by itself, one on a robot or session with all its ties.
func (r *Run) ruled() []string {
	type group struct {
		ruling        *survey.Ruling
		ties, against int // all; those of which the rest of the map says the opposite
	}
	s, verdict := r.Outing.Survey, r.verdicts()
	var out []string
	var groups []*group
	at := map[*survey.Ruling]*group{}
	for i, ruling := range s.TieRulings() {
		if ruling == nil {
			continue
		}
		f := verdict[s.Ties[i].ID]
		if ruling.Target == survey.OnTie {
			if f.Verdict == 0 {
				out = append(out, fmt.Sprintf("Tie %s %s: ruled %s by %s: %s.", s.Ties[i].ID, unheard, ruling.Verdict, ruling.By, ruling.Note))
				continue
			}
			out = append(out, fmt.Sprintf("Tie %s: %s.", s.Ties[i].ID, f.Reason))
			continue
		}
		g := at[ruling]
		if g == nil {
			g = &group{ruling: ruling}
			at[ruling] = g
			groups = append(groups, g)
		}
		g.ties++
		if f.Limit > 0 && (f.Statistic < f.Limit) == (ruling.Verdict == survey.RuledRefused) {
			g.against++
		}
	}
	for _, g := range groups {
		are, verb := "are", "contradict"
		if g.ties == 1 {
			are = "is"
		}
		if g.ruling.Verdict == survey.RuledRefused {
			verb = "agree with"
		}
		out = append(out, fmt.Sprintf("%s of %s %s ruled %s by %s: %s; %d of them %s the joint solution.",
			count(g.ties, "tie"), g.ruling.On(), are, g.ruling.Verdict, g.ruling.By, g.ruling.Note, g.against, verb))
	}
	const most = 12 // lines
	if n := len(out); n > most {
		out = append(out[:most:most], fmt.Sprintf("%s more: the table of ties lists what they are on.", count(n-most, "ruling")))
	}
	return out
}
