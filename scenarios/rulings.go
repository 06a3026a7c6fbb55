package scenarios

import (
	"fmt"

	"selvage/coordinator"
	"selvage/internal/survey"
	"selvage/msgs"
)

// rule gives the coordinator what a person has decided before the outing, line by line.
func rule(c *coordinator.Coordinator, s *survey.Survey) error {
	robot := make(map[string]string, len(s.Ties)) // that measured a tie
	for i := range s.Ties {
		robot[s.Ties[i].ID] = s.Ties[i].FromRobot
	}
	verdict := map[survey.RulingVerdict]msgs.VerdictKind{survey.RuledFree: msgs.Open, survey.RuledHeld: msgs.Held, survey.RuledRefused: msgs.Refused}
	for i := range s.Rulings {
		r := &s.Rulings[i]
		m := msgs.Ruling{Fleet: fleetName, Robot: r.Name, Session: r.Session, Verdict: verdict[r.Verdict], By: r.By, Note: r.Note, StampNS: r.Time.UnixNano()}
		switch r.Target {
		case survey.OnTie:
			m.Target, m.Robot, m.Tie = msgs.OnTie, robot[r.Name], r.Name
		case survey.OnRobot:
			m.Target = msgs.OnRobot
		case survey.OnSession:
			m.Target = msgs.OnSession
		}
		if err := c.Rule(0, m); err != nil {
			return fmt.Errorf("rulings.csv, ruling %d: %w", i+1, err)
		}
	}
	return nil
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
