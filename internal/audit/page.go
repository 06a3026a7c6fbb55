package audit

import (
	"fmt"
	"slices"
	"strings"

	"selvage/internal/reliability"
	"selvage/internal/report"
)

// Page is the report. Made is the date and time with zone as it is to be printed, version the program's.
func (a *Audit) Page(made, version string) report.Page {
	return report.Page{
		Title: a.Survey, Kind: "Audit", Made: made, Version: version,
		Finding: a.Finding(), Cautions: a.cautions(), Attention: a.attention(),
		Plans:  []report.Plan{a.plan},
		Tables: a.tables(),
		Method: a.method(),
		Files: []report.File{
			{Name: "ties.csv", About: "every tie with all its figures, by component, metres and radians"},
			{Name: "audit.json", About: "everything on this page, every loop and every set, for machines"},
		},
	}
}

// statuses counts the ties by status.
func (a *Audit) statuses() map[Status]int {
	n := map[Status]int{}
	for k := range a.Ties {
		n[a.Ties[k].Status]++
	}
	return n
}

// worst returns the checked tie with the largest detectable error and the one that would shift the map most, nil without any.
func (a *Audit) worst() (error, shift *Tie) {
	for k := range a.Ties {
		t := &a.Ties[k]
		if t.DetectableM != nil && (error == nil || *t.DetectableM > *error.DetectableM) {
			error = t
		}
		if t.Shift != nil && t.Shift.Exact && (shift == nil || t.Shift.M > shift.Shift.M) {
			shift = t
		}
	}
	return error, shift
}

// Finding is the result in one sentence.
func (a *Audit) Finding() string {
	var b strings.Builder
	n := a.statuses()
	held := n[Passed] + n[Failed] + n[Unchecked]
	marks := a.shared()
	switch {
	case marks > 0:
	case len(a.Ties) == 0:
		fmt.Fprintf(&b, "No ties: %s in %s, and nothing that joins them", count(a.Sessions, "session"), count(len(a.Islands), "island"))
		return b.String() + "."
	case held == 0:
		return fmt.Sprintf("None of %s is held: %s lie in %s.", count(len(a.Ties), "tie"), count(a.Sessions, "session"), count(len(a.Islands), "island"))
	}
	var holders []string
	if held > 0 {
		holders = append(holders, count(held, "tie"))
	}
	if marks > 0 {
		holders = append(holders, count(marks, "shared mark"))
	}
	fmt.Fprintf(&b, "%s hold%s the map together", list(holders), map[bool]string{true: "s"}[held+marks == 1])
	if len(a.Islands) > 1 {
		fmt.Fprintf(&b, " in %d islands", len(a.Islands))
	}
	var parts []string
	if n[Passed] > 0 {
		parts = append(parts, fmt.Sprintf("%d checked and sound", n[Passed]))
	}
	if n[Failed] > 0 {
		parts = append(parts, fmt.Sprintf("%d failed", n[Failed]))
	}
	if n[Unchecked] > 0 {
		parts = append(parts, fmt.Sprintf("%d that nothing checks", n[Unchecked]))
	}
	if len(parts) > 0 {
		of := ": "
		if marks > 0 {
			of = ", of the ties "
		}
		b.WriteString(of + list(parts))
	}
	if wrong := a.wrong(); len(wrong) > 0 {
		fmt.Fprintf(&b, "; the coordinates of %s %s disagree with what was seen", plural(len(wrong), "control point"), list(wrong))
	}
	if error, shift := a.worst(); error != nil {
		fmt.Fprintf(&b, "; an error of up to %s m could hide in one", short(*error.DetectableM))
		if shift != nil {
			fmt.Fprintf(&b, ", and one could move the map by %s m unseen", short(shift.Shift.M))
		}
	}
	return b.String() + "."
}

func (a *Audit) cautions() []string {
	var out []string
	if !a.Adjustment.Converged() {
		out = append(out, "The adjustment did not converge ("+strings.ReplaceAll(a.Adjustment.Stop, "_", " ")+"): the figures belong to no optimum.")
	}
	n := a.statuses()
	out = append(out, fmt.Sprintf("The verdicts are those of %s. The figures hold under these verdicts: with others they would be others.", a.Decided))
	wide := 0
	for i := range a.Spread {
		if s := &a.Spread[i]; s.Low != nil && *s.Low > 1.2 {
			wide++
		}
	}
	if wide > 0 {
		out = append(out, fmt.Sprintf("The figures take the sigmas as stated, and in %s the real spread is larger: errors that could hide there are larger than said here.", count(wide, "class")))
	}
	if tested := n[Passed] + n[Failed]; tested > 0 {
		out = append(out, fmt.Sprintf("Of %s tested about %s would fail by chance alone if all were sound.", count(tested, "tie"), rough(reliability.Alpha*float64(tested))))
	}
	if a.unclosed {
		out = append(out, "Loops were not closed: some ties do not measure all of a pose, and one alone does not join two robots.")
	} else if a.sighted && len(a.Loops) > 0 {
		out = append(out, "Loops were closed over whole poses alone, without sightings and ties that are less.")
	}
	if a.hidden {
		out = append(out, fmt.Sprintf("The plan shows %d ties, those that need an eye and then the weakest; all stand in ties.csv.", drawn))
	}
	if a.Basin == notDecided {
		out = append(out, a.basinLine())
	}
	return out
}

// attention lists what needs a person's eye, the most urgent first.
func (a *Audit) attention() []string {
	var out []string
	const most = 4 // lines of one sort
	add := func(all []string, rest string) {
		if len(all) > most {
			all = append(all[:most:most], fmt.Sprintf("%d more %s, see the tables.", len(all)-most, rest))
		}
		out = append(out, all...)
	}
	controls, marks, left := a.badMarks()
	add(controls, "control points disagree with what was seen")
	add(marks, "marks are seen in several places")
	if a.Positions != nil {
		out = append(out, a.Positions.Lines()...)
	}
	out = append(out, a.failures()...)
	var places []string
	for _, p := range a.Places {
		if len(p.Ties) == 1 {
			places = append(places, fmt.Sprintf("Tie %s alone joins %s to the rest: nothing checks it, and a wrong one would not show.", p.Ties[0], list(p.Parts)))
		} else {
			places = append(places, fmt.Sprintf("Ties %s alone join %s to the rest, and they lie at one place: what one takes for another there, all do.", list(p.Ties), list(p.Parts)))
		}
	}
	add(places, "parts of the fleet hang by one place")
	var unchecked []string
	for k := range a.Ties {
		if t := &a.Ties[k]; t.Status == Unchecked && !t.Place {
			unchecked = append(unchecked, t.ID)
		}
	}
	if len(unchecked) > 0 {
		out = append(out, fmt.Sprintf("Nothing checks %s %s.", plural(len(unchecked), "tie"), list(unchecked)))
	}
	var sets []string
	for _, s := range a.Sets {
		if len(s.Ties) > 1 {
			with := ""
			if n := s.Odometry + s.Closures + s.Sightings; n > 0 {
				with = fmt.Sprintf(" (nor from %s on the same loop)", count(n, "measurement"))
			}
			sets = append(sets, fmt.Sprintf("Ties %s cannot be told apart%s: a test that finds an error in one finds it in all, and a person has to say which it is.", list(s.Ties), with))
		}
	}
	add(sets, "sets of ties that cannot be told apart")
	var near []string
	for _, s := range a.Near {
		near = append(near, fmt.Sprintf("Ties %s can hardly be told apart: their tests are correlated by %.3f.", list(s.Ties), s.Correlation))
	}
	add(near, "sets of ties that can hardly be told apart")
	var loops []string
	for _, l := range a.badLoops() {
		loops = append(loops, fmt.Sprintf("The loop that tie %s closes%s misses by %s m and %s°, %s times its sigma.", l.Tie, through(l.Way), short(l.M), degrees(&l.Rad, ""), short(l.Sigmas)))
	}
	add(loops, "loops that do not close")
	var spread []string
	for i := range a.Spread {
		if s := &a.Spread[i]; s.Low != nil && (*s.Low > 1.2 || *s.High < 1/1.2) {
			spread = append(spread, sentence(s.Words))
		}
	}
	add(spread, "classes of measurement spread otherwise than stated")
	if len(a.Islands) > 1 {
		var names []string
		for i := range a.Islands {
			if i != a.main {
				names = append(names, a.Islands[i].Sessions...)
			}
		}
		out = append(out, fmt.Sprintf("%s not joined to the datum of %s.", sentenceOf(slices.Compact(names)), list(a.Islands[a.main].Sessions)))
	}
	out = append(append(out, left...), a.leftOut()...)
	for i := range a.Next {
		if i == 3 {
			break
		}
		out = append(out, a.Next[i].words())
	}
	return out
}

// failures says which ties failed, and which of them by themselves.
func (a *Audit) failures() []string {
	var failed, out []string
	for k := range a.Ties {
		if a.Ties[k].Status == Failed {
			failed = append(failed, a.Ties[k].ID)
		}
	}
	if len(failed) == 0 {
		return nil
	}
	out = append(out, fmt.Sprintf("%s %s failed the test, which a sound tie does once in %d.", map[bool]string{true: "Tie", false: "Ties"}[len(failed) == 1], list(failed), int(1/reliability.Alpha)))
	switch n := len(a.Removal); {
	case n == 0 && len(a.Controls) > 0:
		out = append(out, "They stood out only with the control points.")
	case n == 0:
		out = append(out, "Without it the map would come apart.")
	case n+len(a.Controls) == removed:
		out = append(out, fmt.Sprintf("Even with %s taken out one after the other, others fail or may: look at the verdicts before the figures.", list(a.Removal)))
	case n >= len(failed) && n > 1:
		out = append(out, fmt.Sprintf("They fail each by itself: taking out %s one after the other, and adjusting again after each, leaves none.", list(a.Removal)))
	case len(failed) > 1:
		out = append(out, fmt.Sprintf("Taking out %s, and adjusting again after each, leaves none that fails; the rest stood out only with %s.", list(a.Removal), map[bool]string{true: "it", false: "them"}[n == 1]))
	}
	for _, id := range a.Removal {
		for k := range a.Ties {
			if t := &a.Ties[k]; t.ID == id && t.Set > 0 && len(a.Sets[t.Set-1].Ties) > 1 {
				out = append(out, fmt.Sprintf("Tie %s is one of a set that no test tells apart: %s.", id, list(a.Sets[t.Set-1].Ties)))
			}
		}
	}
	return out
}

// badLoops returns the loops that exceed their bound, worst first.
func (a *Audit) badLoops() []Loop {
	var out []Loop
	for _, l := range a.Loops {
		if l.P < reliability.Alpha {
			out = append(out, l)
		}
	}
	slices.SortStableFunc(out, worseLoop)
	return out
}

// leftOut says what became of the ties that are not held.
func (a *Audit) leftOut() []string {
	n := a.statuses()
	var out []string
	if n[Fits] > 0 {
		out = append(out, fmt.Sprintf("%s not held although the map agrees with %s.", isAre(n[Fits], "tie"), map[bool]string{true: "it", false: "them"}[n[Fits] == 1]))
	}
	if n[Untested] > 0 {
		out = append(out, fmt.Sprintf("%s could not be tested: nothing that fits holds their ends in one datum.", count(n[Untested], "tie")))
	}
	return out
}

func isAre(n int, thing string) string {
	if n == 1 {
		return count(n, thing) + " is"
	}
	return count(n, thing) + " are"
}

func sentenceOf(names []string) string {
	if len(names) == 1 {
		return names[0] + " is"
	}
	return list(names) + " are"
}

func through(way []string) string {
	if len(way) == 0 {
		return ""
	}
	return " with " + list(way)
}

// sentence makes a sentence of words.
func sentence(s string) string {
	if s == "" {
		return s
	}
	return strings.ToUpper(s[:1]) + s[1:] + "."
}

// words says where to go and why.
func (c *Candidate) words() string {
	what := fmt.Sprintf("Go next: measure between %s and %s (%s m apart): ", c.A, c.B, short(c.ApartM))
	if c.BeforeM == nil {
		return what + fmt.Sprintf("tie %s, which nothing checks now, would show errors from %s m.", c.Helps, short(c.AfterM))
	}
	return what + fmt.Sprintf("tie %s would show errors from %s m instead of %s m.", c.Helps, short(c.AfterM), short(*c.BeforeM))
}

func (a *Audit) method() []string {
	return []string{
		fmt.Sprintf("All keyframes, measurements and held ties adjusted in one piece by damped Gauss-Newton from the measurements alone: %s, T = %s on %d degrees of freedom, p = %s. One keyframe of each island is held fixed, and shifts and covariances are relative to it.",
			count(a.Adjustment.Iterations, "step"), short(a.Adjustment.T), a.Adjustment.DoF, probability(&a.Adjustment.P, "")),
		fmt.Sprintf("Figures of a tie with residual r, information Omega and predicted covariance P = J Q J': Q_v = Omega⁻¹ - P, redundancy diag(Q_v Omega), statistic r' Q_v⁻¹ r against the %.1f %% bound of chi-square, smallest detectable error %.3f / sqrt((Omega Q_v Omega)_cc) for a test that rejects a sound tie once in %d and finds the error in %.0f %% of cases (Baarda 1968; Teunissen 2000; Knight, Wang, Rizos 2010). Covariances are read from the sparse factor (Takahashi, Fagan, Chen 1973).",
			100*(1-reliability.Alpha), reliability.Delta, int(1/reliability.Alpha), 100*reliability.Power),
		"Shift: how far an error of the detectable size along one component moves the position that it moves most, Q J' Omega e, the worst component. Where it says at most, it is the bound from the largest standard deviation instead. Leave-one-out: the distance between a tie and what everything else predicts, from the same factor.",
		"Bridges, places and sets come from the graph, not from numbers: a bridge lies on no loop; measurements that lie on the very same loops cannot be told apart (Pritchard and Thurimella 2011). Ties that can hardly be told apart come from the correlation of their tests (Förstner 1983), the root mean square of the canonical correlations of their residuals. Ties within the distance at which two count as two witnesses share a place.",
		"Loops: the ties of a spanning tree are kept, and every other held tie is compared with the map of the tree, each robot's own closures included. Sigmas: root mean square over the components.",
		"Real spread: variance components from residuals and redundancies, repeated until they stay (Helmert's estimate as simplified by Förstner 1979), with 95 % bounds of first order from the information of restricted maximum likelihood, which counts how groups check each other.",
		a.basinMethod(),
		"All figures are of first order at the solution and conditional on the verdicts.",
	}
}
