package main

import (
	"context"
	"errors"
	"fmt"
	"path/filepath"
	"slices"
	"time"

	"selvage/internal/audit"
	"selvage/internal/survey"
	"selvage/scenarios"
)

type auditCmd struct {
	Survey  string `arg:"" help:"Folder of the survey."`
	Out     string `short:"o" placeholder:"FOLDER" help:"Put results/ into this folder instead of the survey's own."`
	Place   string `enum:",robust" default:"" placeholder:"HOW" help:"robust: keep control points out of the adjustment, then place the whole map on them as one piece, leaving out and naming those that contradict the others (default: control points take part, and hold the datum)."`
	HoldAll bool   `help:"Take every tie as true, whatever its verdict."`
	JSON    bool   `name:"json" help:"Print audit.json instead of the findings."`
}

func (auditCmd) Help() string {
	return `Which ties hold the map together, how well each is checked, how large an error could hide in it and how far that would move the map, where loops do not close, whether the stated sigmas were met, and where the fleet should go next. It needs no bus. Ties keep the verdicts of results/verdicts.csv; where there is no such file, the coordinator decides on whole poses as it would have on site, and ties that are less than a pose are held if they fit the others. So are sightings of marks.

It writes results/audit.html, results/audit.json and results/ties.csv.

Example, with the survey that the example of split makes:

  selvage audit square-in-2
`
}

// Run implements the verb.
func (c *auditCmd) Run(ctx context.Context, con *console) error {
	if c.Out == "" {
		c.Out = c.Survey
	}
	if err := writable(c.Out); err != nil {
		return err
	}
	p := con.progress()
	defer p.end()
	p.begin("reading " + c.Survey)
	s, err := interruptible(ctx, func() (*survey.Survey, error) { return survey.Read(c.Survey) })
	if err != nil {
		return err
	}
	if len(s.Robots) == 0 {
		return badInput("%s has no robots: there is nothing to audit", c.Survey)
	}
	in := audit.Input{Survey: s, Place: c.Place != "", Progress: p.begin}
	if in.Verdicts, in.Decided, err = c.verdicts(ctx, s, p); err != nil {
		return err
	}
	for i, r := range s.TieRulings() {
		if r != nil && (!c.HoldAll || r.Verdict == survey.RuledRefused) {
			in.Verdicts[i] = ruled(in.Verdicts[i], r)
		}
	}
	in.Verdicts = slices.DeleteFunc(in.Verdicts, func(v survey.ResultVerdict) bool { return v.Verdict == "" })
	if in.History, err = survey.ReadHistory(c.Survey, s); err != nil {
		return err
	}
	a, err := interruptible(ctx, func() (*audit.Audit, error) { return audit.Run(ctx, in) })
	if errors.Is(err, audit.ErrNoControl) {
		return badInput("%s: --place robust, but %w; nothing was written", c.Survey, err)
	}
	if errors.Is(err, audit.ErrUndetermined) {
		return badInput("%s: %w; nothing was written", c.Survey, err)
	}
	if err != nil {
		return err
	}
	results := filepath.Join(c.Out, "results")
	p.begin("writing " + results)
	if err := a.Write(results, time.Now().Format("2006-01-02 15:04:05 UTC-07:00"), version()); err != nil {
		return err
	}
	p.end()
	con.warn(s.Warnings)
	if c.JSON {
		if err := a.JSON(con.out); err != nil {
			return err
		}
	} else {
		con.finding("%s", a.Finding())
		if err := a.Text(con.out); err != nil {
			return err
		}
		fmt.Fprintf(con.out, "\nfolder    %s (audit.html, audit.json, ties.csv)\n", results)
	}
	if !a.Adjustment.Converged() {
		return checkFailed("the adjustment did not converge (%s after %d steps)", a.Adjustment.Stop, a.Adjustment.Iterations)
	}
	return nil
}

// verdicts returns one verdict for each tie, in the order of the survey, and who says so; one that is empty is left to the fit. It takes
// the loop closures that are not held out of s.
func (c *auditCmd) verdicts(ctx context.Context, s *survey.Survey, p *progress) ([]survey.ResultVerdict, string, error) {
	all := make([]survey.ResultVerdict, len(s.Ties))
	for i := range all {
		all[i] = survey.ResultVerdict{Tie: s.Ties[i].ID, Verdict: "open", Reason: "has no verdict"}
		if c.HoldAll {
			all[i].Verdict, all[i].Reason = "held", unseen
		}
	}
	if c.HoldAll {
		return all, "nobody: every tie is taken as true", nil
	}
	known, err := survey.ReadVerdicts(c.Survey, s)
	if err != nil {
		return nil, "", err
	}
	if known == nil && len(s.Ties) > 0 {
		return c.decide(ctx, s, p)
	}
	at := make(map[string]int, len(all))
	for i := range all {
		at[all[i].Tie] = i
	}
	for _, v := range known {
		all[at[v.Tie]] = unruled(v, all[at[v.Tie]])
	}
	if _, err := survey.LeaveOutClosures(c.Survey, s); err != nil {
		return nil, "", err
	}
	decided := "results/verdicts.csv"
	if n := len(all) - len(known); n > 0 {
		decided += fmt.Sprintf(" (%d of %d ties have none there and are left out)", n, len(all))
	}
	return all, decided, nil
}

// decide has agents and coordinator judge the whole poses of the survey, all delivered at once. Ties that are less than a pose get no
// verdict.
func (c *auditCmd) decide(ctx context.Context, s *survey.Survey, p *progress) ([]survey.ResultVerdict, string, error) {
	const fit = "the robust fit, for all else that was seen at once"
	out := make([]survey.ResultVerdict, len(s.Ties))
	poses := *s
	poses.Ties, poses.Marks, poses.Robots = nil, nil, slices.Clone(s.Robots)
	var at []int // of each of these ties, in s
	for i := range s.Ties {
		out[i].Tie = s.Ties[i].ID
		if s.Ties[i].Kind == survey.WholePose {
			poses.Ties, at = append(poses.Ties, s.Ties[i]), append(at, i)
		}
	}
	for i := range poses.Robots {
		poses.Robots[i].Sightings = nil
	}
	if len(at) == 0 {
		return out, fit, nil
	}
	p.begin("deciding on the ties")
	run, err := scenarios.Virtual(ctx, scenarios.Recorded(&poses), scenarios.Settings{})
	if err != nil {
		return nil, "", err
	}
	if run.Interrupted {
		return nil, "", context.Canceled
	}
	verdicts, closures := run.Verdicts(), run.Closures()
	for k, v := range verdicts {
		out[at[k]] = v
	}
	for i := range s.Robots {
		r := &s.Robots[i]
		kept := make([]survey.Relative, 0, len(r.Relatives))
		for _, m := range r.Relatives {
			if m.Kind == survey.Closure {
				held := closures[0].Verdict == "held"
				closures = closures[1:]
				if !held {
					continue
				}
			}
			kept = append(kept, m)
		}
		r.Relatives = kept
	}
	by := "the coordinator, from the whole survey at once"
	if len(at) < len(s.Ties) {
		by += ", for whole poses, and " + fit
	}
	return out, by, nil
}
