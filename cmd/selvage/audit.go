package main

import (
	"context"
	"errors"
	"fmt"
	"path/filepath"
	"time"

	"selvage/internal/audit"
	"selvage/internal/survey"
	"selvage/scenarios"
)

type auditCmd struct {
	Survey  string `arg:"" help:"Folder of the survey."`
	Out     string `short:"o" placeholder:"FOLDER" help:"Put results/ into this folder instead of the survey's own."`
	HoldAll bool   `help:"Take every tie as true, whatever its verdict."`
	JSON    bool   `name:"json" help:"Print audit.json instead of the findings."`
}

func (auditCmd) Help() string {
	return `Which ties hold the map together, how well each is checked, how large an error could hide in it and how far that would move the map, where loops do not close, whether the stated sigmas were met, and where the fleet should go next. It needs no bus. Ties keep the verdicts of results/verdicts.csv; where there is no such file, the coordinator decides on them as it would have on site.

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
	in := audit.Input{Survey: s, Progress: p.begin}
	if in.Verdicts, in.Decided, err = c.verdicts(ctx, s, p); err != nil {
		return err
	}
	a, err := interruptible(ctx, func() (*audit.Audit, error) { return audit.Run(ctx, in) })
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

// verdicts returns who says what of the ties.
func (c *auditCmd) verdicts(ctx context.Context, s *survey.Survey, p *progress) ([]survey.ResultVerdict, string, error) {
	if c.HoldAll {
		all := make([]survey.ResultVerdict, len(s.Ties))
		for i := range all {
			all[i] = survey.ResultVerdict{Tie: s.Ties[i].ID, Verdict: "held", Reason: "taken as true: nobody has looked at it"}
		}
		return all, "nobody: every tie is taken as true", nil
	}
	known, err := survey.ReadVerdicts(c.Survey, s)
	if err != nil {
		return nil, "", err
	}
	if known != nil || len(s.Ties) == 0 {
		decided := "results/verdicts.csv"
		if n := len(s.Ties) - len(known); n > 0 {
			decided += fmt.Sprintf(" (%d of %d ties have none there and are left out)", n, len(s.Ties))
		}
		return known, decided, nil
	}
	p.begin("deciding on the ties")
	run, err := scenarios.Virtual(ctx, scenarios.Recorded(s), scenarios.Settings{})
	if err != nil {
		return nil, "", err
	}
	if run.Interrupted {
		return nil, "", context.Canceled
	}
	return run.Verdicts(), "the coordinator, from the whole survey at once", nil
}
