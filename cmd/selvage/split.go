package main

import (
	"context"
	"errors"
	"fmt"

	"selvage/internal/report"
	"selvage/internal/survey"
	"selvage/partition"
	"selvage/scenarios"
)

type splitCmd struct {
	Survey string `arg:"" help:"Folder of a survey with one robot, one session and no ties."`
	Pieces int    `short:"n" required:"" placeholder:"K" help:"Number of pieces, from 2 on."`
	Out    string `short:"o" required:"" placeholder:"FOLDER" help:"Survey to write: new, empty, or a survey that is replaced."`
	Seed   uint64 `default:"1" help:"Seed of the search (default 1); equal seeds give equal pieces."`
}

func (splitCmd) Help() string {
	return `Each piece is connected, at most 3 % larger than an even share, and becomes a robot p01, p02 ...; measurements between pieces become ties.

Example, with the survey that the example of convert makes:

  selvage split square -n 2 -o square-in-2
`
}

// Run implements the verb.
func (c *splitCmd) Run(ctx context.Context, con *console) error {
	if c.Pieces < 2 {
		return badInput("-n %d: expected 2 pieces or more", c.Pieces)
	}
	p := con.progress()
	defer p.end()
	p.begin("reading " + c.Survey)
	s, err := interruptible(ctx, func() (*survey.Survey, error) { return survey.Read(c.Survey) })
	if err != nil {
		return err
	}
	p.begin("splitting")
	type cut struct {
		survey  *survey.Survey
		quality partition.SplitQuality
	}
	made, err := interruptible(ctx, func() (cut, error) {
		t, q, err := scenarios.SplitSurvey(s, c.Pieces, c.Seed)
		return cut{t, q}, err
	})
	switch {
	case errors.Is(err, context.Canceled):
		return err
	case errors.Is(err, partition.ErrNoSplit):
		return badInput("%s cannot be cut into %d connected pieces of near equal size: %w; try another number of pieces", c.Survey, c.Pieces, err)
	case err != nil:
		return badInput("%s: %w", c.Survey, err)
	}
	p.begin("writing " + c.Out)
	if err := survey.Write(c.Out, made.survey); err != nil {
		return err
	}
	p.end()
	con.warn(s.Warnings)
	return c.show(con, made.survey, made.quality)
}

// show prints the finding and a row a piece.
func (c *splitCmd) show(con *console, s *survey.Survey, q partition.SplitQuality) error {
	con.finding("%s holds %d pieces: %d keyframes on the boundary, %d measurements cut, balance %.3f (1 is even).", c.Out, q.Pieces, q.Boundary, q.Cut, q.Balance)
	type end struct {
		robot string
		key   int64
	}
	onBoundary := map[end]bool{}
	tiesOf := map[string]int{}
	for i := range s.Ties {
		t := &s.Ties[i]
		onBoundary[end{t.FromRobot, t.FromKey}] = true
		onBoundary[end{t.ToRobot, t.ToKey}] = true
		tiesOf[t.FromRobot]++
		tiesOf[t.ToRobot]++
	}
	boundaryOf := map[string]int{}
	for e := range onBoundary {
		boundaryOf[e.robot]++
	}
	t := report.Table{Caption: "The pieces", Columns: []report.Column{{Name: "piece"}, {Name: "keyframes", Right: true}, {Name: "on the boundary", Right: true},
		{Name: "measurements", Right: true}, {Name: "ties", Right: true}}}
	for i := range s.Robots {
		r := &s.Robots[i]
		t.Rows = append(t.Rows, []string{r.ID, fmt.Sprint(len(r.Keyframes)), fmt.Sprint(boundaryOf[r.ID]), fmt.Sprint(len(r.Relatives)), fmt.Sprint(tiesOf[r.ID])})
	}
	return con.table(t)
}
