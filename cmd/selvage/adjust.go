package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"time"

	"selvage/internal/adjust"
	"selvage/internal/audit"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

type adjustCmd struct {
	Survey        string  `arg:"" help:"Folder of the survey."`
	Out           string  `short:"o" placeholder:"FOLDER" help:"Put results/ into this folder instead of the survey's own."`
	Start         string  `enum:"auto,chordal,tree,given" default:"auto" help:"Where to begin: chordal (from the measurements alone, rotations first), tree (by chaining measurements), given (at the poses of the survey), or auto (chordal, else tree)."`
	Workers       int     `default:"1" help:"Processors to use, 1 or 2 (default 1); the result is the same to the last bit."`
	Tolerance     float64 `default:"1e-12" help:"Converged when a step would lower the cost by less than this share of it (default 1e-12)."`
	MaxIterations int     `default:"500" placeholder:"N" help:"Give up after so many steps (default 500)."`
	AllTies       bool    `help:"Also use ties and loop closures that the survey's verdicts call refused or open, but not ties that were ruled refused."`
	AllSightings  bool    `help:"Let every sighting count in full, also those that do not fit the others."`
	FramesOnly    bool    `help:"Freeze each robot's own map, made from what it alone has seen, and find the frames of the robots only; there are no covariances."`
	Place         string  `enum:",robust" default:"" placeholder:"HOW" help:"robust: keep control points out of the adjustment, then place the whole map on them as one piece, leaving out and naming those that contradict the others (default: control points take part, and hold the datum)."`
	JSON          bool    `name:"json" help:"Print one JSON object instead of the table."`
}

func (adjustCmd) Help() string {
	return `Every keyframe, every measurement and the ties in one least-squares adjustment; poses, covariances and the place of each session's frame go to results/. Marks that marks.csv calls control points hold the datum; check points take no part and show how well the positions came out, in the words of the standard FGDC-STD-007.3-1998. Ties that results/verdicts.csv calls refused or open stay out, and so do the loop closures that results/closures.csv calls so; what rulings.csv says of a tie comes before that (selvage rule).

Example, with the survey that the example of split makes:

  selvage adjust square-in-2
`
}

// adjustReport is what --json prints. Costs are F = 1/2 sum r' Omega r; times are seconds.
type adjustReport struct {
	Survey       string      `json:"survey"`
	Results      string      `json:"results"`
	Dimension    int         `json:"dimension"`
	Robots       int         `json:"robots"`
	Keyframes    int         `json:"keyframes"`
	Measurements int         `json:"measurements"`      // within sessions
	ClosuresOut  int         `json:"closures_left_out"` // refused or open, not counted above
	Ties         int         `json:"ties"`
	TiesHeld     int         `json:"ties_held"`     // in the adjustment
	TiesLeftOut  []string    `json:"ties_left_out"` // refused or open
	Rulings      []tieRuling `json:"rulings"`       // on single ties or on their robots: they come before the verdicts
	Sightings    int         `json:"sightings"`     // of marks, and ties that are less than a pose
	SightingsCut int         `json:"sightings_left_out"`
	RuledOut     int         `json:"sightings_ruled_out"` // of marks, by robots or sessions that were ruled refused
	Islands      int         `json:"islands"`

	Positions *audit.Positions `json:"positions,omitempty"` // of marks whose places were surveyed

	Start        string     `json:"start"`
	InitialCost  float64    `json:"initial_cost"`
	Cost         float64    `json:"cost"`
	Iterations   int        `json:"iterations"`
	RefusedSteps int        `json:"refused_steps"`
	Stop         string     `json:"stop"`
	Seconds      phaseTimes `json:"seconds"`
}

type phaseTimes struct {
	Read       float64 `json:"read"`
	Build      float64 `json:"build"`
	Start      float64 `json:"start"`
	Analyse    float64 `json:"analyse"`
	Optimise   float64 `json:"optimise"`
	Place      float64 `json:"place"`
	Covariance float64 `json:"covariance"`
	Write      float64 `json:"write"`
}

// check looks at what kong cannot.
func (c *adjustCmd) check() error {
	switch {
	case c.Workers < 1 || c.Workers > 2:
		return badInput("--workers %d: expected 1 or 2", c.Workers)
	case !(c.Tolerance > 0) || c.Tolerance > 1:
		return badInput("--tolerance %g: expected a number above 0, at most 1", c.Tolerance)
	case c.FramesOnly && (c.AllSightings || c.Place != ""):
		return badInput("--frames-only goes without --all-sightings and --place")
	case c.FramesOnly && c.Start == string(adjust.Given):
		return badInput("--frames-only makes the robots' maps itself: expected another --start than given")
	case c.MaxIterations < 1:
		return badInput("--max-iterations %d: expected 1 or more", c.MaxIterations)
	}
	return nil
}

// adjustment is one run of the verb.
type adjustment struct {
	*adjustCmd
	ctx      context.Context
	progress *progress
	survey   *survey.Survey
	verdicts []survey.ResultVerdict // one a tie
	rulings  []*survey.Ruling       // one a tie, nil for none
	problem  *adjust.Problem
	islands  *islands
	sigma    posegraph.Covariance
	report   adjustReport
}

// Run implements the verb.
func (c *adjustCmd) Run(ctx context.Context, con *console) error {
	if err := c.check(); err != nil {
		return err
	}
	if c.Out == "" {
		c.Out = c.Survey
	}
	a := &adjustment{adjustCmd: c, ctx: ctx, progress: con.progress()}
	defer a.progress.end()
	a.report = adjustReport{Survey: c.Survey, Results: filepath.Join(c.Out, "results"), Start: c.Start}
	t := &a.report.Seconds
	for _, phase := range []struct {
		name    string
		seconds *float64
		work    func() error
	}{
		{"reading " + c.Survey, &t.Read, a.read},
		{"building the pose graph", &t.Build, a.build},
		{"finding starting values", &t.Start, a.start},
		{"analysing", &t.Analyse, func() error { return a.problem.Analyse(c.Workers) }},
		{"adjusting", &t.Optimise, a.optimise},
		{"comparing with marks of known place", &t.Place, a.place},
		{"computing covariances", &t.Covariance, a.covariance},
	} {
		a.progress.begin(phase.name)
		began := time.Now()
		if _, err := interruptible(ctx, func() (struct{}, error) { return struct{}{}, phase.work() }); err != nil {
			return err
		}
		*phase.seconds = time.Since(began).Seconds()
	}
	a.progress.begin("writing " + a.report.Results)
	began := time.Now()
	if err := a.write(); err != nil {
		return err
	}
	t.Write = time.Since(began).Seconds()
	a.progress.end()
	con.warn(a.survey.Warnings)
	if c.JSON {
		e := json.NewEncoder(con.out)
		e.SetIndent("", "  ")
		if err := e.Encode(&a.report); err != nil {
			return err
		}
	} else if err := a.show(con); err != nil {
		return err
	}
	if s := a.report.Stop; s != posegraph.Converged.String() && s != posegraph.NothingToAdjust.String() {
		return checkFailed("the adjustment did not converge (%s after %d steps); the results are the best so far", s, a.report.Iterations)
	}
	return nil
}

// unseen is the reason of a verdict that nothing speaks for.
const unseen = "taken as true: nobody has looked at it"

// read reads survey and verdicts, and makes sure that the results can go where they are to go.
func (a *adjustment) read() error {
	s, err := survey.Read(a.Survey)
	if err != nil {
		return err
	}
	if err := writable(a.Out); err != nil {
		return err
	}
	known, err := survey.ReadVerdicts(a.Survey, s)
	if err != nil {
		return err
	}
	found := make(map[string]*survey.ResultVerdict, len(known))
	for i := range known {
		found[known[i].Tie] = &known[i]
	}
	a.report.TiesLeftOut = []string{}
	a.rulings = s.TieRulings()
	for i := range s.Ties {
		v := survey.ResultVerdict{Tie: s.Ties[i].ID, Verdict: "held", Reason: unseen,
			ChiSquare: math.NaN(), Threshold: math.NaN(), Redundancy: math.NaN(), Detectable: math.NaN()}
		if f := found[v.Tie]; f != nil {
			v = unruled(*f, v)
		}
		if r := a.rulings[i]; r != nil {
			v = ruled(v, r)
		}
		if !a.in(i, v.Verdict) {
			a.report.TiesLeftOut = append(a.report.TiesLeftOut, v.Tie)
		}
		a.verdicts = append(a.verdicts, v)
	}
	if !a.AllTies {
		if a.report.ClosuresOut, err = survey.LeaveOutClosures(a.Survey, s); err != nil {
			return err
		}
	}
	a.survey = s
	a.report.Dimension, a.report.Robots, a.report.Ties = s.Meta.Dimension, len(s.Robots), len(s.Ties)
	a.report.TiesHeld = len(s.Ties) - len(a.report.TiesLeftOut)
	for i := range s.Robots {
		a.report.Keyframes += len(s.Robots[i].Keyframes)
		a.report.Measurements += len(s.Robots[i].Relatives)
	}
	return nil
}

// in tells whether a tie with that verdict is in the adjustment: --all-ties lets all in that nobody has ruled on.
func (a *adjustment) in(tie int, verdict string) bool {
	return verdict == "held" || a.AllTies && a.rulings[tie] == nil
}

// writable returns an error unless dir is absent or empty, or holds a survey or results of one.
func writable(dir string) error {
	entries, err := os.ReadDir(dir)
	if errors.Is(err, os.ErrNotExist) {
		return nil
	}
	if err != nil {
		return fmt.Errorf("results: %w", err)
	}
	ours := len(entries) == 0
	for _, e := range entries {
		ours = ours || e.Name() == "survey.yaml" || e.Name() == "results"
	}
	if !ours {
		return badInput("%s is not empty and holds neither a survey nor results: expected a new folder or one of these", dir)
	}
	return survey.ResultsReplaceable(dir)
}

func (a *adjustment) build() error {
	var err error
	a.problem, err = adjust.New(a.survey, func(tie int) bool { return a.in(tie, a.verdicts[tie].Verdict) })
	if err != nil {
		return err
	}
	if len(a.problem.Keys) == 0 {
		return badInput("%s holds no keyframes: there is nothing to adjust", a.Survey)
	}
	a.problem.Apart = a.Place != ""
	sights := a.problem.Sights()
	a.report.Sightings = len(sights)
	for i := range a.survey.Robots {
		a.report.RuledOut += len(a.survey.Robots[i].Sightings)
	}
	for i := range sights {
		if sights[i].Tie < 0 {
			a.report.RuledOut--
		}
	}
	return nil
}

func (a *adjustment) start() error {
	if err := a.problem.Begin(adjust.Start(a.Start)); err != nil {
		return err
	}
	a.islands = findIslands(a.problem)
	a.report.Islands = len(a.islands.sessions)
	return nil
}

func (a *adjustment) optimise() error {
	o := posegraph.Options{Tolerance: a.Tolerance, MaxIterations: a.MaxIterations}
	o.Watch = func(iteration int, cost, damping float64) bool {
		a.progress.at(-1, "step %d, cost %.8g", iteration, cost)
		return a.ctx.Err() == nil
	}
	var r posegraph.Result
	switch {
	case a.FramesOnly:
		var err error
		if r, err = a.problem.FramesOnly(o); err != nil {
			return badInput("%s: %w; nothing was written", a.Survey, err)
		}
	case a.report.Sightings > 0 && !a.AllSightings:
		decided := a.problem.SolveRobust(o, func(tie int) bool { return a.rulings[tie] != nil && a.rulings[tie].Verdict == survey.RuledHeld })
		r, a.report.SightingsCut = decided.Result, decided.Refused
		a.judge(&decided)
	default:
		r = a.problem.Solve(o)
	}
	switch r.Stop {
	case posegraph.Interrupted:
		return a.ctx.Err()
	case posegraph.Undetermined:
		return badInput("%s: the measurements leave %s, free in some direction; nothing was written", a.Survey, a.problem.Describe(r.Weakest))
	}
	a.weighRulings()
	a.report.InitialCost, a.report.Cost = r.InitialCost, r.Cost
	a.report.Iterations, a.report.RefusedSteps, a.report.Stop = r.Iterations, r.Refused, r.Stop.String()
	return nil
}

// place puts the map on its control points if asked to, and compares it with them and with the check points.
func (a *adjustment) place() error {
	var placed []adjust.Placed
	if a.problem.Apart {
		var err error
		if placed, err = a.problem.Place(); err != nil {
			return badInput("%s: the measurements leave a pose free in some direction, so the map cannot be placed (%w); nothing was written", a.Survey, err)
		}
		if len(placed) == 0 {
			return badInput("%s: --place robust, but no control point was seen; nothing was written", a.Survey)
		}
		a.islands = findIslands(a.problem)
	}
	a.report.Positions = audit.Compare(a.problem, a.survey, placed)
	return nil
}

func (a *adjustment) covariance() error {
	if a.FramesOnly || a.report.Stop == posegraph.NothingToAdjust.String() {
		return nil
	}
	var err error
	if a.sigma, err = a.problem.Solver().Covariance(); err != nil {
		return badInput("%s: the measurements leave a pose free in some direction, so there are no covariances (%w); nothing was written", a.Survey, err)
	}
	return nil
}
