package main

import (
	"cmp"
	"fmt"
	"slices"
	"strings"

	"selvage/internal/adjust"
	"selvage/internal/posegraph"
	"selvage/internal/report"
	"selvage/internal/survey"
)

// unit is one session of one robot.
type unit struct {
	robot   string
	session uint32
}

// islands says what hangs together. Island 0 is the one whose frame is the datum: one that control points hold, if there is any, then
// the one with the most sessions, then the most keyframes, then the first.
type islands struct {
	number   []int    // island of the problem -> number
	sessions [][]unit // number -> sessions, by the island of their first keyframe
	units    []unit   // all sessions
	first    []int32  // their first keyframes, as variables
	broken   []unit   // sessions that fall into several islands
}

func findIslands(p *adjust.Problem) *islands {
	var l islands
	at := map[unit]int{}
	sessions := make([][]unit, p.Islands)
	keyframes := make([]int, p.Islands)
	for v, k := range p.Keys {
		u := unit{k.Robot, k.Session}
		keyframes[p.Island[v]]++
		i, seen := at[u]
		if !seen {
			at[u] = len(l.units)
			l.units, l.first = append(l.units, u), append(l.first, int32(v))
			sessions[p.Island[v]] = append(sessions[p.Island[v]], u)
		} else if p.Island[v] != p.Island[l.first[i]] && !slices.Contains(l.broken, u) {
			l.broken = append(l.broken, u)
		}
	}
	order := make([]int, len(sessions))
	for i := range order {
		order[i] = i
	}
	stands := func(island int) int {
		if p.InDatum(int32(island)) {
			return 1
		}
		return 0
	}
	slices.SortStableFunc(order, func(a, b int) int {
		return cmp.Or(cmp.Compare(stands(b), stands(a)), cmp.Compare(len(sessions[b]), len(sessions[a])), cmp.Compare(keyframes[b], keyframes[a]))
	})
	l.number = make([]int, len(order))
	l.sessions = make([][]unit, len(order))
	for n, i := range order {
		l.number[i], l.sessions[n] = n, sessions[i]
	}
	return &l
}

// write puts the results in place.
func (a *adjustment) write() error {
	p, l := a.problem, a.islands
	poses := make([]survey.ResultPose, 0, len(p.Keys))
	datum := make([]survey.ResultDatum, 0, len(l.units))
	given := make([]survey.Pose, 0, len(p.Keys)) // as the front ends had them
	for i := range a.survey.Robots {
		r := &a.survey.Robots[i]
		for _, k := range r.Keyframes {
			v := int32(len(given))
			given = append(given, k.Pose)
			out := survey.ResultPose{Robot: r.ID, Session: k.Session, ID: k.ID, StampNS: k.StampNS, HasStamp: k.HasStamp,
				Pose: adjust.Folder(&p.Graph.Values.Poses[v]), HasCov: !a.FramesOnly}
			if out.HasCov {
				a.fillCov(v, &out.Cov)
			}
			poses = append(poses, out)
		}
	}
	for i, u := range l.units {
		f := l.first[i]
		x := p.Graph.Values.Poses[f].Mul(adjust.Pose(given[f]).Inv())
		island := l.number[p.Island[f]]
		datum = append(datum, survey.ResultDatum{Robot: u.robot, Session: u.session, Joined: island == 0, Island: island, Pose: adjust.Folder(&x)})
	}
	by := "the first keyframe of each island"
	if len(p.Anchors) < p.Islands {
		by = "control points or, in an island that has too few, its first keyframe"
	}
	if a.problem.Apart {
		by = "its control points, on which the map was placed as a whole or, in an island that was not, by its first keyframe"
	}
	note := fmt.Sprintf("adjusted in one piece, %d of %d ties in it; datum %s, held by %s", a.report.TiesHeld, a.report.Ties, a.survey.Meta.Datum.Name, by)
	if a.FramesOnly {
		note = "each robot's own map as it is, their frames " + note
	}
	return survey.WriteResults(a.Out, poses, a.verdicts, datum, note)
}

// fillCov writes the upper triangle of the covariance of a variable; what is fixed has zeros.
func (a *adjustment) fillCov(v int32, to *[21]float64) {
	if a.report.Stop == posegraph.NothingToAdjust.String() {
		return
	}
	m := a.sigma.Of(v)
	if m == nil {
		return
	}
	component := []int{0, 1, 2, 3, 4, 5}
	if a.problem.Graph.Dim == 3 {
		component = []int{0, 1, 5}
	}
	d := len(component)
	for i, r := range component {
		for j := i; j < d; j++ {
			c := component[j]
			to[r*6-r*(r-1)/2+c-r] = m[i*d+j]
		}
	}
}

// show prints the finding and the figures.
func (a *adjustment) show(con *console) error {
	r := &a.report
	con.finding("%s", a.sentence())
	for _, u := range a.islands.broken {
		fmt.Fprintf(con.out, "Robot %s, session %d, falls into parts that no measurement joins.\n", u.robot, u.session)
	}
	a.showRulings(con)
	if r.Positions != nil {
		for _, line := range r.Positions.Lines() {
			fmt.Fprintln(con.out, "- "+line)
		}
	}
	t := report.Table{Caption: "The adjustment", Columns: []report.Column{{Name: "figure"}, {Name: "value", Right: true}}}
	row := func(name, format string, args ...any) {
		t.Rows = append(t.Rows, []string{name, fmt.Sprintf(format, args...)})
	}
	row("keyframes", "%d", r.Keyframes)
	row("measurements within sessions", "%d", r.Measurements)
	if r.ClosuresOut > 0 {
		row("loop closures left out by verdict", "%d", r.ClosuresOut)
	}
	row("ties in the adjustment", "%d of %d", r.TiesHeld, r.Ties)
	if r.Sightings > 0 {
		row("sightings left out", "%d of %d", r.SightingsCut, r.Sightings)
	}
	row("cost at the start", "%.8g", r.InitialCost)
	row("cost", "%.10g", r.Cost)
	row("steps", "%d (%d refused)", r.Iterations, r.RefusedSteps)
	row("ended", "%s", r.Stop)
	s := &r.Seconds
	row("seconds", "%.3f", s.Read+s.Build+s.Start+s.Analyse+s.Optimise+s.Place+s.Covariance+s.Write)
	if err := con.table(t); err != nil {
		return err
	}
	if r.Positions.Any() {
		fmt.Fprintln(con.out)
		if err := con.table(r.Positions.Table()); err != nil {
			return err
		}
	}
	fmt.Fprintf(con.out, "\nResults are in %s.\n%s\n", r.Results, report.Safety)
	return nil
}

// sentence is the finding.
func (a *adjustment) sentence() string {
	r, joined, all := &a.report, len(a.islands.sessions[0]), len(a.islands.units)
	share := fmt.Sprintf("All %d sessions share the datum", all)
	switch {
	case all == 1:
		share = "The one session makes the datum"
	case joined < all:
		share = fmt.Sprintf("%d of %d sessions %s in the datum, the others in %s of their own", joined, all, oneOr(joined, "lies", "lie"), counted(r.Islands-1, "island"))
	}
	if r.Ties == 0 {
		return share + "."
	}
	held := counted(r.TiesHeld, "tie") + oneOr(r.TiesHeld, " holds it", " hold it")
	if r.TiesHeld == 0 {
		held = "no tie holds it"
	}
	if n := len(r.TiesLeftOut); n > 0 {
		held += fmt.Sprintf(", %d %s left out by verdict (%s)", n, oneOr(n, "was", "were"), firstOf(r.TiesLeftOut))
	}
	return share + "; " + held + "."
}

func counted(n int, what string) string { return fmt.Sprintf("%d %s%s", n, what, oneOr(n, "", "s")) }

func oneOr(n int, one, many string) string {
	if n == 1 {
		return one
	}
	return many
}

// firstOf lists some names.
func firstOf(names []string) string {
	const most = 4
	text := strings.Join(names[:min(len(names), most)], ", ")
	if len(names) > most {
		text += " ..."
	}
	return text
}
