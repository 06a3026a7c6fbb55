package audit

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"selvage/internal/report"
	"selvage/internal/survey"
)

// shown is how many rows a table of the page has at most; the files have all.
const shown = 150

func (a *Audit) tables() []report.Table {
	var out []report.Table
	if a.Positions.Any() {
		out = append(out, cut(a.Positions.Table(), "audit.json"))
	}
	for _, t := range []report.Table{a.nextTable(), a.controlTable(), a.markTable(), a.testTable(), a.hiddenTable(), a.leftTable(), a.sightTable(), a.historyTable(), a.setTable(), a.nearTable(), a.loopTable(), a.spreadTable()} {
		if len(t.Rows) > 0 {
			out = append(out, t)
		}
	}
	return out
}

// cut shortens a table and says so.
func cut(t report.Table, file string) report.Table {
	if n := len(t.Rows); n > shown {
		t.Rows = t.Rows[:shown]
		t.Note = fmt.Sprintf("The first %d of %d rows; all stand in %s. %s", shown, n, file, t.Note)
	}
	return t
}

func number(name, unit string) report.Column {
	return report.Column{Name: name, Unit: unit, Right: true}
}

func (a *Audit) nextTable() report.Table {
	t := report.Table{
		Caption: "Where a further tie would help most",
		Note:    "Places where two tracks pass within reach of each other, away from the tie that they are to check.",
		Columns: []report.Column{{Name: "between"}, {Name: "and"}, number("apart", "m"), {Name: "serves tie"}, number("its smallest detectable error now", "m"), number("then", "m"), number("unchecked ties then", "")},
	}
	for i := range a.Next {
		c := &a.Next[i]
		t.Rows = append(t.Rows, []string{c.A.String(), c.B.String(), short(c.ApartM), c.Helps, figure(c.BeforeM, "nothing checks it now"), short(c.AfterM), fmt.Sprint(c.Unchecked)})
	}
	return t
}

// rank orders ties by need of a person's eye.
var rank = map[Status]int{Failed: 0, Unchecked: 1, Passed: 2, Contradicts: 3, Fits: 4, Untested: 5}

// testTable and hiddenTable are the two halves of tieTable, so that each fits a sheet of paper.
func (a *Audit) testTable() report.Table {
	t := a.tieTable().pick(0, 1, 2, 3, 4, 5, 6, 7, 8)
	t.Caption, t.Note = "Held ties and their tests", ""
	return cut(t.Table, "ties.csv")
}

func (a *Audit) hiddenTable() report.Table {
	t := a.tieTable().pick(0, 3, 9, 10, 11, 12, 13, 14)
	t.Caption = "Held ties and what could hide in them, weakest first"
	return cut(t.Table, "ties.csv")
}

// wide is a table to take columns from.
type wide struct{ report.Table }

func (w wide) pick(columns ...int) wide {
	out := w
	out.Columns, out.Rows = nil, make([][]string, len(w.Rows))
	for _, c := range columns {
		out.Columns = append(out.Columns, w.Columns[c])
		for i, row := range w.Rows {
			out.Rows[i] = append(out.Rows[i], row[c])
		}
	}
	return out
}

func (a *Audit) tieTable() wide {
	t := report.Table{
		Caption: "Held ties, weakest first",
		Columns: []report.Column{{Name: "tie"}, {Name: "from"}, {Name: "to"}, {Name: "finding"}, number("residual", "m"), number("residual", "°"), number("largest", "sigmas"),
			number("statistic", ""), number("p", ""), number("redundancy of translation", ""), number("of rotation", ""), number("smallest detectable", "m"), number("smallest detectable", "°"), number("shifts the map", "m"), number("leave-one-out", "m")},
	}
	var ties []*Tie
	for k := range a.Ties {
		if a.Ties[k].held {
			ties = append(ties, &a.Ties[k])
		}
	}
	slices.SortStableFunc(ties, func(x, y *Tie) int {
		return cmp.Or(cmp.Compare(rank[x.Status], rank[y.Status]), cmp.Compare(y.detectable(), x.detectable()))
	})
	bounded := false
	for _, x := range ties {
		const none = "nothing checks this tie, or it does not measure that"
		w, shift := report.Missing(none), report.Missing(none)
		if x.W != nil {
			most := 0.0
			for _, c := range x.W {
				most = max(most, math.Abs(float64(c))) // of NaN: NaN, which is shown as missing
			}
			w = fmt.Sprintf("%.1f", most)
		}
		if x.Shift != nil {
			shift = short(x.Shift.M)
			if !x.Shift.Exact {
				shift, bounded = "≤ "+shift, true
			}
		}
		finding := string(x.Status)
		if x.Kind != survey.WholePose.String() {
			finding = strings.ReplaceAll(x.Kind, "_", " and ") + ", " + finding
		}
		if x.Bridge {
			finding += ", bridge"
		} else if x.Place {
			finding += ", single place"
		}
		t.Rows = append(t.Rows, []string{x.ID, x.From.String(), x.To.String(), finding, figure(x.ResidualM, none), degrees(x.ResidualRad, none), w,
			figure(x.T, none), probability(x.P, none), fraction(x.RedundancyTranslation), fraction(x.RedundancyRotation), figure(x.DetectableM, none), degrees(x.DetectableRad, none), shift, figure(x.ApartM, none)})
	}
	if len(a.Islands) > 0 {
		if g := a.Islands[a.main].Gauge; g != nil {
			t.Note = "Shifts are relative to " + g.String() + ", which is held fixed"
		} else {
			t.Note = "Shifts are relative to the datum, which control points hold"
		}
		if len(a.Islands) > 1 {
			t.Note += ", and in the other islands to their first keyframe or control points"
		}
		t.Note += "."
	}
	if bounded {
		t.Note += " ≤ marks a bound; the shifts of the ties that could be worst are exact."
	}
	return wide{t}
}

// fraction writes a redundancy.
func fraction(x *float64) string {
	switch {
	case x == nil:
		return report.Missing("not measured")
	case *x < 0.0005:
		return "0"
	}
	return fmt.Sprintf("%.3f", *x)
}

func (a *Audit) leftTable() report.Table {
	t := report.Table{
		Caption: "Ties that are not held",
		Note:    "What the map of the held ties says of them.",
		Columns: []report.Column{{Name: "tie"}, {Name: "from"}, {Name: "to"}, {Name: "verdict"}, {Name: "against the map"}, number("apart", "m"), number("apart", "°"), number("statistic", ""), {Name: "reason"}},
	}
	for k := range a.Ties {
		x := &a.Ties[k]
		if x.held {
			continue
		}
		const none = "its ends share no datum, or it does not measure that"
		stat := figure(x.T, none)
		if x.AtLeast {
			stat = "≥ " + stat
		}
		t.Rows = append(t.Rows, []string{x.ID, x.From.String(), x.To.String(), x.Verdict, string(x.Status), figure(x.ApartM, none), degrees(x.ApartRad, none), stat, x.Reason})
	}
	return cut(t, "ties.csv")
}

func (a *Audit) setTable() report.Table {
	t := report.Table{
		Caption: "Measurements that no test can tell apart",
		Columns: []report.Column{{Name: "ties"}, number("odometry steps with them", ""), number("closures with them", ""), number("sightings of marks with them", "")},
	}
	for _, s := range a.Sets {
		if len(s.Ties) > 1 {
			t.Rows = append(t.Rows, []string{list(s.Ties), fmt.Sprint(s.Odometry), fmt.Sprint(s.Closures), fmt.Sprint(s.Sightings)})
		}
	}
	single := len(a.Sets) - len(t.Rows)
	if single > 0 {
		t.Note = fmt.Sprintf("Besides, %s with odometry, closures or sightings only.", map[bool]string{true: "1 tie shares a set", false: fmt.Sprintf("%d ties share sets", single)}[single == 1])
	}
	return cut(t, "audit.json")
}

func (a *Audit) nearTable() report.Table {
	t := report.Table{
		Caption: "Ties that a test can hardly tell apart",
		Note:    fmt.Sprintf("Their tests are correlated by more than %.2f: an error in one is likely taken for one in another.", inseparable),
		Columns: []report.Column{{Name: "ties"}, number("correlation", "")},
	}
	if !a.compared {
		t.Note += " Only the tests of the ties with the largest shifts were compared with all others."
	}
	for _, s := range a.Near {
		t.Rows = append(t.Rows, []string{list(s.Ties), fmt.Sprintf("%.4f", s.Correlation)})
	}
	return cut(t, "audit.json")
}

func worseLoop(x, y Loop) int { return cmp.Compare(y.Sigmas, x.Sigmas) }

func (a *Audit) loopTable() report.Table {
	t := report.Table{
		Caption: "Independent loops, worst first",
		Columns: []report.Column{{Name: "closed by"}, {Name: "over the ties"}, number("misclosure", "m"), number("misclosure", "°"), number("misclosure", "sigmas"), number("p", "")},
	}
	loops := slices.Clone(a.Loops)
	slices.SortStableFunc(loops, worseLoop)
	for _, l := range loops {
		way := "its own robots' maps"
		if len(l.Way) > 0 {
			way = list(l.Way)
		}
		t.Rows = append(t.Rows, []string{l.Tie, way, short(l.M), degrees(&l.Rad, ""), fmt.Sprintf("%.2f", l.Sigmas), probability(&l.P, "")})
	}
	if len(t.Rows) > 40 {
		t.Note = fmt.Sprintf("The worst 40 of %d; all stand in audit.json.", len(t.Rows))
		t.Rows = t.Rows[:40]
	}
	return t
}

func (a *Audit) spreadTable() report.Table {
	t := report.Table{
		Caption: "Real spread against the stated sigmas",
		Columns: []report.Column{{Name: "robot"}, {Name: "class"}, number("measurements", ""), number("redundancy", ""), number("real over stated", ""), number("at least", ""), number("at most", "")},
		Note:    "At least, at most: with 95 % confidence.",
	}
	if !a.Arrived {
		t.Note += " The iteration was stopped before the estimates had settled."
	}
	for i := range a.Spread {
		s := &a.Spread[i]
		const none = "too little checks it"
		t.Rows = append(t.Rows, []string{s.Robot, s.Class, fmt.Sprint(s.Measurements), fmt.Sprintf("%.1f", s.Redundancy), figure(s.Ratio, none), figure(s.Low, none), figure(s.High, none)})
	}
	return t
}
