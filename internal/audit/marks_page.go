package audit

import (
	"cmp"
	"fmt"
	"slices"

	"selvage/internal/reliability"
	"selvage/internal/report"
)

// shared counts the marks that join sessions, and wrong names the control points whose coordinates disagree with what was seen.
func (a *Audit) shared() (n int) {
	for k := range a.Marks {
		if len(a.Marks[k].Sessions) > 1 {
			n++
		}
	}
	return n
}

func (a *Audit) wrong() (names []string) {
	for _, status := range [2]Status{Contradicts, Failed} {
		for _, m := range a.controls() {
			if m.Control.Status == status {
				names = append(names, m.Mark)
			}
		}
		if names != nil {
			break
		}
	}
	return names
}

// controls lists the control points, those that need an eye first.
func (a *Audit) controls() (marks []*Mark) {
	for k := range a.Marks {
		if a.Marks[k].Control != nil {
			marks = append(marks, &a.Marks[k])
		}
	}
	order := map[Status]int{Contradicts: 0, Failed: 1, Unchecked: 2, Passed: 3, Fits: 4}
	slices.SortStableFunc(marks, func(x, y *Mark) int {
		return cmp.Or(cmp.Compare(order[x.Control.Status], order[y.Control.Status]), cmp.Compare(y.Control.excess(), x.Control.excess()))
	})
	return marks
}

// seen lists the marks that several have seen, those seen in several places first.
func (a *Audit) seen() (marks []*Mark) {
	for k := range a.Marks {
		if len(a.Marks[k].Sessions) > 1 {
			marks = append(marks, &a.Marks[k])
		}
	}
	slices.SortStableFunc(marks, func(x, y *Mark) int { return cmp.Compare(y.Split.excess(), x.Split.excess()) })
	return marks
}

// excess of a statistic over its bound; 0 without any.
func (s *Split) excess() float64 {
	if s == nil {
		return 0
	}
	return s.T / reliability.Bound(s.DoF)
}

// badMarks says which control points and marks need a person's eye, and what was left out.
func (a *Audit) badMarks() (controls, marks, rest []string) {
	for _, m := range a.controls() {
		c := m.Control
		switch {
		case c.Status == Contradicts && c.ApartM != nil:
			where := ""
			if c.LiesAt != "" {
				where = fmt.Sprintf(", %s m from those of %s: the two may be exchanged", short(*c.LiesAtM), c.LiesAt)
			}
			controls = append(controls, fmt.Sprintf("Control point %s is not where its coordinates say: %s put it %s m away%s. Its coordinates are left out.", m.Mark, count(m.Sightings, "sighting"), short(*c.ApartM), where))
		case c.Status == Contradicts:
			controls = append(controls, fmt.Sprintf("Control point %s: what was seen of it agrees neither with its coordinates nor with itself, and all %s are left out.", m.Mark, count(m.LeftOut, "sighting")))
		case c.Status == Failed && c.ApartM != nil:
			controls = append(controls, fmt.Sprintf("Control point %s failed its test: all else has it %s m from its coordinates.", m.Mark, short(*c.ApartM)))
		case c.Status == Failed:
			controls = append(controls, fmt.Sprintf("Control point %s failed its test.", m.Mark))
		}
	}
	if n := len(a.Controls); n > 0 {
		controls = append(controls, fmt.Sprintf("Taking the coordinates of %s out, one after the other and adjusting again after each, leaves no control point that fails.", list(a.Controls)))
	}
	for _, m := range a.seen() {
		s := m.Split
		if s == nil || !s.Failed {
			continue
		}
		by := ""
		if s.M != nil {
			by = " by " + short(*s.M) + " m"
		}
		if len(m.Sessions) == 2 && (m.Control == nil || m.Control.index < 0) {
			marks = append(marks, fmt.Sprintf("%s disagree%s on where mark %s is: one of them may mean another thing.", list(m.Sessions), by, m.Mark))
		} else {
			marks = append(marks, fmt.Sprintf("%s has mark %s elsewhere than all else%s.", s.Session, m.Mark, by))
		}
	}
	if len(a.LeftOut) > 0 {
		out, most := 0, &a.LeftOut[0]
		for k := range a.LeftOut {
			l := &a.LeftOut[k]
			out += l.LeftOut
			if l.LeftOut > most.LeftOut {
				most = l
			}
		}
		rest = append(rest, fmt.Sprintf("%s of marks %s left out, for they do not fit the others; most by %s of %s, %d of %d.", count(out, "sighting"), map[bool]string{true: "is", false: "are"}[out == 1], most.Robot, most.Mark, most.LeftOut, most.Of))
	}
	return controls, marks, rest
}

// controlTable lists the control points, those that failed first.
func (a *Audit) controlTable() report.Table {
	t := report.Table{
		Caption: "Control points against what was seen of them",
		Note:    "Apart: how far the coordinates lie from where all else has the mark. Left out: its coordinates, for most of what was seen disagreed with them.",
		Columns: []report.Column{{Name: "control point"}, {Name: "finding"}, number("apart", "m"), number("statistic", ""), number("p", ""), number("redundancy", ""), number("smallest detectable", "m"), number("sightings", ""), number("left out", "")},
	}
	for _, m := range a.controls() {
		c := m.Control
		finding := string(c.Status)
		redundancy := fraction(c.Redundancy)
		if c.index < 0 {
			finding = "left out: " + finding
			redundancy = report.Missing("its coordinates are left out")
		}
		const none = "nothing checks it"
		t.Rows = append(t.Rows, []string{m.Mark, finding, figure(c.ApartM, none), figure(c.T, none), probability(c.P, none), redundancy, figure(c.DetectableM, none), fmt.Sprint(m.Sightings), fmt.Sprint(m.LeftOut)})
	}
	return cut(t, "audit.json")
}

func (c *Control) excess() float64 {
	if c.T == nil {
		return 0
	}
	return *c.T
}

// markTable lists the marks that several sessions have seen, those seen apart first.
func (a *Audit) markTable() report.Table {
	t := report.Table{
		Caption: "Marks that several have seen",
		Note:    "Seen elsewhere: the session that differs most from all else, and by how much. Where only two have seen a mark, either may be wrong.",
		Columns: []report.Column{{Name: "mark"}, {Name: "seen by"}, number("sightings", ""), number("left out", ""), number("redundancy", ""), number("worst misfit", "sigmas"), {Name: "seen elsewhere by"}, number("apart", "m"), number("statistic", ""), number("p", "")},
	}
	if a.unsplit {
		t.Note += " There are more marks than could be tested for that."
	}
	for _, m := range a.seen() {
		const none = "nothing checks it"
		row := []string{m.Mark, list(m.Sessions), fmt.Sprint(m.Sightings), fmt.Sprint(m.LeftOut), fraction(m.Redundancy), figure(m.Worst, none)}
		if s := m.Split; s == nil {
			row = append(row, report.Missing(none), report.Missing(none), report.Missing(none), report.Missing(none))
		} else {
			row = append(row, s.Session, figure(s.M, "not determined in all directions"), short(s.T), probability(&s.P, ""))
		}
		t.Rows = append(t.Rows, row)
	}
	return cut(t, "audit.json")
}

// sightTable lists what was left out of the sightings of marks, most first.
func (a *Audit) sightTable() report.Table {
	t := report.Table{
		Caption: "Sightings of marks that are left out",
		Note:    "They do not fit the others, or the others do not place the mark.",
		Columns: []report.Column{{Name: "robot"}, {Name: "mark"}, number("left out", ""), number("of", "")},
	}
	all := slices.Clone(a.LeftOut)
	slices.SortStableFunc(all, func(x, y LeftOut) int { return cmp.Compare(y.LeftOut, x.LeftOut) })
	for _, l := range all {
		t.Rows = append(t.Rows, []string{l.Robot, l.Mark, fmt.Sprint(l.LeftOut), fmt.Sprint(l.Of)})
	}
	return cut(t, "audit.json")
}
