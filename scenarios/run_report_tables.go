package scenarios

import (
	"fmt"
	"io"
	"strings"

	"selvage/internal/report"
	"selvage/msgs"
)

// Text writes the score for a terminal: the table of the robots, then a line for each figure of the fleet.
func (s *Score) Text(w io.Writer, width int) error {
	if err := s.robotTable().Text(w, width); err != nil {
		return err
	}
	var b strings.Builder
	line := func(name, text string) { fmt.Fprintf(&b, "%-8s  %s\n", name, text) }
	b.WriteByte('\n')
	word := func(n int, ofTrue, ofFalse func(*Verdicts) int) string {
		if s.Ties.True == nil {
			return fmt.Sprint(n)
		}
		return fmt.Sprintf("%d (%d true, %d false)", n, ofTrue(s.Ties.True), ofFalse(s.Ties.False))
	}
	each := func(pick func(*Verdicts) int) string { return word(pick(&s.Ties.All), pick, pick) }
	ties := "held " + each(func(v *Verdicts) int { return v.Held }) + ", refused " + each(func(v *Verdicts) int { return v.Refused }) +
		", open " + each(func(v *Verdicts) int { return v.Open })
	if s.Ties.All.Unheard > 0 {
		ties += ", unheard " + each(func(v *Verdicts) int { return v.Unheard })
	}
	line("ties", ties)
	line("changed", fmt.Sprintf("%s after the first verdict; %d held once and no more", count(s.TiesChanged, "tie"), s.TiesLost))
	line("rounds", fmt.Sprintf("%d after the last measurement; epoch %d", s.Rounds, s.Epoch))
	switch {
	case s.GapRelative != nil:
		line("gap", fmt.Sprintf("%s to the adjustment in one piece (accepted up to %s)", power(*s.GapRelative, 2), power(gapLimit, 1)))
	case s.Interrupted:
		line("gap", "not computed: interrupted")
	default:
		line("gap", "not computed: no sessions share a datum")
	}
	switch {
	case s.Interrupted:
		line("result", "interrupted, not accepted")
	case s.Accepted:
		line("result", "accepted")
	default:
		line("result", "NOT accepted: "+strings.Join(s.failed(), "; "))
	}
	_, err := io.WriteString(w, b.String())
	return err
}

func (s *Score) robotTable() report.Table {
	t := report.Table{
		Caption: "Robots at the end",
		Columns: []report.Column{
			{Name: "robot"}, {Name: "keyframes", Right: true}, {Name: "joined"},
			{Name: "error alone", Unit: "m", Right: true}, {Name: "error in team", Unit: "m", Right: true},
			{Name: "sent", Unit: "kB", Right: true}, {Name: "largest summary", Unit: "kB", Right: true}, {Name: "raw graph", Unit: "kB", Right: true},
			{Name: "sent of raw", Unit: "%", Right: true},
		},
	}
	for i := range s.Robots {
		x := &s.Robots[i]
		joined, alone, team := "yes", "no truth is known", "no truth is known"
		if s.Truth {
			alone, team = "no truth is known for it", "no truth is known for it"
		}
		if !x.Joined {
			joined = "no"
			if s.Truth && x.AteTeam == nil {
				team = "shares no datum with another robot"
			}
		}
		share := report.Missing("nothing was measured")
		if x.BytesRaw > 0 {
			share = fmt.Sprintf("%.1f", 100*float64(x.BytesUp)/float64(x.BytesRaw))
		}
		t.Rows = append(t.Rows, []string{
			x.ID, fmt.Sprint(x.Keyframes), joined, metres(x.AteAlone, alone), metres(x.AteTeam, team),
			kilo(x.BytesUp), kilo(x.BytesUpLargest), kilo(x.BytesRaw), share,
		})
	}
	return t
}

func (s *Score) tieTable() report.Table {
	t := report.Table{
		Caption: "Ties by verdict",
		Columns: []report.Column{{Name: "ties"}, {Name: "held", Right: true}, {Name: "refused", Right: true}, {Name: "open", Right: true}, {Name: "unheard", Right: true}},
		File:    "verdicts.csv",
	}
	row := func(name string, v *Verdicts) {
		if v != nil {
			t.Rows = append(t.Rows, []string{name, fmt.Sprint(v.Held), fmt.Sprint(v.Refused), fmt.Sprint(v.Open), fmt.Sprint(v.Unheard)})
		}
	}
	row("all", &s.Ties.All)
	row("true", s.Ties.True)
	row("false", s.Ties.False)
	return t
}

func (s *Score) acceptanceTable() report.Table {
	t := report.Table{
		Caption: "Acceptance",
		Columns: []report.Column{{Name: "rule"}, {Name: "reached", Right: true}, {Name: "limit", Right: true}, {Name: "holds"}},
	}
	for i := range s.Acceptance {
		c := &s.Acceptance[i]
		holds, reached, limit := "no", small(c.Value, "no sessions share a datum"), fmt.Sprint(c.Limit)
		if c.OK {
			holds = "yes"
		}
		switch c.Name {
		case "settled":
			reached, limit = holds, "yes"
		case "gap":
			limit = power(c.Limit, 1)
		}
		t.Rows = append(t.Rows, []string{c.Rule, reached, limit, holds})
	}
	return t
}

// islandTables is empty where no sessions share a datum.
func (s *Score) islandTables() []report.Table {
	if len(s.Islands) == 0 {
		return nil
	}
	t := report.Table{
		Caption: "Islands, and how near each is to the adjustment in one piece",
		Columns: []report.Column{{Name: "datum began with"}, {Name: "robots"}, {Name: "cost of the fleet's map", Right: true}, {Name: "cost in one piece", Right: true}, {Name: "gap", Right: true}},
	}
	for i := range s.Islands {
		x := &s.Islands[i]
		const reason = "no finite value"
		cost := func(f *float64) string {
			if f == nil {
				return report.Missing(reason)
			}
			return fmt.Sprintf("%.9g", *f)
		}
		t.Rows = append(t.Rows, []string{x.Island, list(x.Robots), cost(x.Fleet), cost(x.Whole), small(x.GapRelative, reason)})
	}
	return []report.Table{t}
}

// doubtTable lists every tie that is not held.
func (r *Run) doubtTable(truth []bool) report.Table {
	t := report.Table{
		Caption: "Ties that are not held",
		Columns: []report.Column{{Name: "tie"}, {Name: "from"}, {Name: "to"}, {Name: "verdict"}, {Name: "reason"}},
		File:    "verdicts.csv",
	}
	if truth != nil {
		t.Columns = append(t.Columns, report.Column{Name: "truth"})
	}
	verdict, measured := r.verdicts(), r.measured()
	for i := range r.Outing.Survey.Ties {
		if !measured[i] {
			continue
		}
		tie := &r.Outing.Survey.Ties[i]
		f := verdict[tie.ID]
		word, reason := f.Verdict.String(), f.Reason
		switch f.Verdict {
		case msgs.Held:
			continue
		case msgs.Refused, msgs.Open:
		default:
			word, reason = "unheard", unheard
		}
		to := fmt.Sprintf("%s %d", tie.ToRobot, tie.ToKey)
		if tie.ToByStamp {
			to = fmt.Sprintf("%s at %d ns", tie.ToRobot, tie.ToStampNS)
		}
		row := []string{tie.ID, fmt.Sprintf("%s %d", tie.FromRobot, tie.FromKey), to, word, reason}
		if truth != nil && truth[i] {
			row = append(row, "true")
		} else if truth != nil {
			row = append(row, "false")
		}
		t.Rows = append(t.Rows, row)
	}
	return t
}
