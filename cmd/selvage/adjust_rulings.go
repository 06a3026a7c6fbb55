package main

import (
	"fmt"
	"math"
	"strings"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// tieRuling is what a person has decided on a tie, and what the adjustment makes of it.
type tieRuling struct {
	Tie     string `json:"tie"`
	Verdict string `json:"verdict"` // held or refused
	On      string `json:"on"`      // the tie itself, its robot or its session
	By      string `json:"by"`
	Note    string `json:"note"`

	// Misclosure is r' Omega r of the tie at the adjusted poses, over its own sigmas alone, also where it is refused; null where
	// nothing joins its ends, and for a refused tie that is less than a pose or ends between keyframes.
	Misclosure *float64 `json:"misclosure"`
}

// isRuled begins the reason of a verdict that a person gave.
const isRuled = "ruled "

// ruled returns the verdict on a tie that a person has ruled on, v being the one before.
func ruled(v survey.ResultVerdict, r *survey.Ruling) survey.ResultVerdict {
	by := r.By
	if r.Target != survey.OnTie {
		by += " (" + r.On() + ")"
	}
	out := survey.ResultVerdict{Tie: v.Tie, Verdict: r.Verdict.String(), Reason: fmt.Sprintf("%s%s by %s: %s", isRuled, r.Verdict, by, r.Note),
		ChiSquare: math.NaN(), Threshold: math.NaN(), Redundancy: math.NaN(), Detectable: math.NaN()}
	if v.Reason != unseen {
		out.Evidence = v.Verdict
	}
	return out
}

// unruled returns a known verdict as it was before a person ruled on the tie; fresh is that on a tie that nobody has looked at.
func unruled(v, fresh survey.ResultVerdict) survey.ResultVerdict {
	switch {
	case !strings.HasPrefix(v.Reason, isRuled):
		return v
	case v.Evidence == "":
		return fresh
	}
	fresh.Verdict, fresh.Reason = v.Evidence, "as it was before a ruling"
	return fresh
}

// weighRulings fills in what the adjustment makes of the ties that were ruled on.
func (a *adjustment) weighRulings() {
	a.report.Rulings = []tieRuling{}
	partial := map[int]adjust.Sight{}
	for _, s := range a.problem.Sights() {
		if s.Tie >= 0 && s.Set != nil {
			partial[s.Tie] = s
		}
	}
	for i, r := range a.rulings {
		if r == nil {
			continue
		}
		ruling := tieRuling{Tie: a.survey.Ties[i].ID, Verdict: r.Verdict.String(), On: r.On(), By: r.By, Note: r.Note}
		m, ok := a.misclosure(&a.survey.Ties[i])
		if s, sight := partial[i]; sight {
			m, ok = s.Set.Chi2(s.K, &a.problem.Graph.Values), true
		}
		if ok {
			ruling.Misclosure = &m
			a.verdicts[i].Reason += fmt.Sprintf("; misclosure %.1f over its own sigmas", m)
		}
		a.report.Rulings = append(a.report.Rulings, ruling)
	}
}

// misclosure returns r' Omega r of a tie between keyframes of one island at the adjusted poses.
func (a *adjustment) misclosure(t *survey.Tie) (float64, bool) {
	p := a.problem
	from, hasFrom := p.Var[adjust.Key{Robot: t.FromRobot, Session: t.FromSession, ID: t.FromKey}]
	to, hasTo := p.Var[adjust.Key{Robot: t.ToRobot, Session: t.ToSession, ID: t.ToKey}]
	if t.Kind != survey.WholePose || t.ToByStamp || !hasFrom || !hasTo || p.Island[from] != p.Island[to] {
		return 0, false
	}
	info, err := t.Cov.Information(a.survey.Meta.Dimension)
	if err != nil {
		return 0, false
	}
	x := p.Graph.Values.Poses
	g := posegraph.New(p.Graph.Dim, []lie.SE3{x[from], x[to]})
	b := g.AddBetween()
	b.Add(0, 1, adjust.Pose(t.Pose), &info)
	return b.Chi2(0, &g.Values), true
}

// showRulings prints a line for each tie that was ruled on, and one for the ties of a robot or session.
func (a *adjustment) showRulings(con *console) {
	const most = 12
	all := a.report.Rulings
	if n := a.report.RuledOut; n > 0 {
		fmt.Fprintf(con.out, "%s of marks %s left out, by robots or sessions that are ruled refused.\n", counted(n, "sighting"), oneOr(n, "is", "are"))
	}
	single := 0
	count := map[*survey.Ruling]int{} // ties that one on a robot or session is on
	for _, r := range a.rulings {
		if r != nil {
			count[r]++
		}
	}
	for i := range a.survey.Rulings {
		if r := &a.survey.Rulings[i]; r.Target != survey.OnTie && count[r] > 0 {
			fmt.Fprintf(con.out, "%s of %s %s ruled %s by %s: %s.\n", counted(count[r], "tie"), r.On(), oneOr(count[r], "is", "are"), r.Verdict, r.By, r.Note)
		}
	}
	for _, r := range all {
		if r.On != "tie "+r.Tie {
			continue
		}
		if single++; single > most {
			fmt.Fprintln(con.out, "More ties are ruled on: results/verdicts.csv lists them.")
			return
		}
		fmt.Fprintf(con.out, "Tie %s is ruled %s by %s: %s.", r.Tie, r.Verdict, r.By, r.Note)
		if r.Misclosure != nil {
			fmt.Fprintf(con.out, " Its misclosure is %.1f over its own sigmas.", *r.Misclosure)
		}
		fmt.Fprintln(con.out)
	}
}
