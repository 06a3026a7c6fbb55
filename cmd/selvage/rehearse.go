package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"selvage/internal/survey"
	"selvage/scenarios"
)

type rehearseCmd struct {
	Scenario   string   `arg:"" optional:"" help:"A built-in scenario, mine (the default), store or wood, or a YAML file."`
	Seed       *uint64  `placeholder:"N" help:"Seed of everything that is drawn (default: that of the scenario)."`
	Out        string   `short:"o" placeholder:"FOLDER" help:"Folder to write, new or of an earlier rehearsal, which is replaced (default rehearsal-NAME-SEED)."`
	Survey     string   `placeholder:"FOLDER" help:"Rehearse with a recorded or split survey instead of a scenario."`
	HoldAll    bool     `help:"Take every tie, loop closure and sighting as true."`
	Audit      bool     `help:"Audit the survey that comes out as well, as selvage audit does with its folder."`
	RealBus    bool     `help:"Run on the embedded message bus and the clock on the wall, at full speed, instead of a virtual clock and radio."`
	Robots     *int     `placeholder:"N" help:"Number of robots instead of the scenario's."`
	False      *float64 `placeholder:"SHARE" help:"Share of single false ties, of all ties, instead of the scenario's."`
	Clustered  *float64 `placeholder:"SHARE" help:"Share of false ties that agree with each other, of all ties, instead of the scenario's."`
	NoProgress bool     `help:"Tell nothing while it runs."`
	JSON       bool     `name:"json" help:"Print results/summary.json instead of the table."`
}

func (rehearseCmd) Help() string {
	return `A whole fleet, its agents, the radio and the coordinator, on a virtual clock, far faster than real time. The same scenario, seed and program give the same files. The folder is a survey with its truth; results/ has report.html, summary.json and the map.

The exit code is 0 only if the acceptance figures hold. An interrupt ends the run where it is and keeps what was finished.

Examples:

  selvage rehearse
  selvage rehearse store --seed 3 --out look-alikes
`
}

// Run implements the verb.
func (c *rehearseCmd) Run(ctx context.Context, con *console) error {
	prepare, recorded, err := c.plan()
	if err != nil {
		return err
	}
	if err := c.reserve(recorded); err != nil {
		return err
	}
	watch := con.watch(c.NoProgress, c.RealBus)
	defer watch.end()
	watch.begin("preparing")
	o, err := interruptible(ctx, prepare)
	if err != nil {
		return err
	}
	con.warn(o.outing.Survey.Warnings)
	watch.begin("rehearsing " + o.outing.Survey.Meta.Name)
	run, made, err := c.run(ctx, o, watch)
	if err != nil {
		return err
	}
	watch.begin("scoring")
	score, err := run.Score()
	if err != nil {
		return err
	}
	watch.begin("writing " + c.Out)
	if err := run.Write(c.Out, score, made, version()); err != nil {
		return err
	}
	watch.end()
	if err := c.show(con, score); err != nil {
		return err
	}
	if c.Audit && !score.Interrupted {
		fmt.Fprintln(con.out)
		if err := (&auditCmd{Survey: c.Out}).Run(ctx, con); err != nil {
			return err
		}
	}
	switch {
	case score.Interrupted:
		return checkFailed("interrupted; %s holds what was finished", c.Out)
	case !score.Accepted:
		return checkFailed("not accepted; %s tells more", filepath.Join(c.Out, "results", "report.html"))
	}
	return nil
}

// rehearsal is what goes into the run.
type rehearsal struct {
	outing *scenarios.Outing
	origin string // as the report is to say it
}

// run runs it, and says when that was: a virtual run says nothing of the clock on the wall, so that it gives the same bytes.
func (c *rehearseCmd) run(ctx context.Context, o rehearsal, w *watch) (*scenarios.Run, string, error) {
	set := scenarios.Settings{HoldAll: c.HoldAll, Progress: w.at}
	if c.RealBus {
		made := time.Now().Format("2006-01-02 15:04:05 UTC-07:00")
		run, err := scenarios.OnBus(ctx, o.outing, set)
		return run, made + ", " + o.origin + ", on the real bus", err
	}
	run, err := scenarios.Virtual(ctx, o.outing, set)
	if err != nil {
		return nil, "", err
	}
	minutes := run.EndNS / 60e9
	return run, fmt.Sprintf("%s, %d h %02d min of virtual time", o.origin, minutes/60, minutes%60), nil
}

// plan checks the command line, settles where to write, and returns what makes the outing, with the survey if it is a recorded one.
func (c *rehearseCmd) plan() (func() (rehearsal, error), *survey.Survey, error) {
	if c.Audit && c.JSON {
		return nil, nil, badInput("--audit goes without --json: both print; selvage audit --json does so afterwards")
	}
	if c.Survey != "" {
		if c.Scenario != "" || c.Seed != nil || c.Robots != nil || c.False != nil || c.Clustered != nil {
			return nil, nil, badInput("--survey goes without a scenario and without --seed, --robots, --false and --clustered: they change a simulation")
		}
		s, err := survey.Read(c.Survey)
		if err != nil {
			return nil, nil, err
		}
		if len(s.Robots) == 0 {
			return nil, nil, badInput("%s has no robots: there is nothing to rehearse", c.Survey)
		}
		if c.Out == "" {
			c.Out = "rehearsal-" + s.Meta.Name
		}
		return func() (rehearsal, error) {
			return rehearsal{scenarios.Recorded(s), "recorded survey"}, nil
		}, s, nil
	}
	sc, err := c.scenario()
	if err != nil {
		return nil, nil, err
	}
	if c.Out == "" {
		c.Out = fmt.Sprintf("rehearsal-%s-%d", sc.Name, sc.Seed)
	}
	return func() (rehearsal, error) {
		w, err := scenarios.Simulate(sc, sc.Seed)
		if err != nil {
			return rehearsal{}, badInput("%w", err)
		}
		return rehearsal{w.Outing(sc, sc.Seed), fmt.Sprintf("seed %d", sc.Seed)}, nil
	}, nil, nil
}

// reserve makes sure, before the work begins, that the folder can be written when it is done.
func (c *rehearseCmd) reserve(recorded *survey.Survey) error {
	if err := scenarios.CheckFolder(c.Out, recorded); err != nil {
		return err
	}
	parent := filepath.Dir(filepath.Clean(c.Out))
	for parent != filepath.Dir(parent) {
		if _, err := os.Stat(parent); !errors.Is(err, os.ErrNotExist) {
			break
		}
		parent = filepath.Dir(parent) // it will be made
	}
	probe, err := os.MkdirTemp(parent, ".rehearsal-")
	if err != nil {
		return err
	}
	return os.Remove(probe)
}

// scenario reads the scenario and lays the flags over it.
func (c *rehearseCmd) scenario() (*scenarios.Scenario, error) {
	names := scenarios.BuiltinNames()
	if c.Scenario == "" {
		c.Scenario = names[0]
	}
	var sc *scenarios.Scenario
	var err error
	if slices.Contains(names, c.Scenario) {
		sc, err = scenarios.Builtin(c.Scenario)
	} else {
		sc, err = readScenario(c.Scenario)
	}
	if err != nil {
		return nil, err
	}
	if c.Seed != nil {
		sc.Seed = *c.Seed
	}
	if c.Robots != nil {
		sc.Fleet.Robots = *c.Robots
	}
	if c.False != nil {
		sc.FalseTies.Independent = *c.False
	}
	if c.Clustered != nil {
		sc.FalseTies.Clustered = *c.Clustered
	}
	if err := sc.Validate(); err != nil {
		return nil, badInput("%s with the flags given: %w", c.Scenario, err)
	}
	return sc, nil
}

// readScenario reads a YAML file; Load refuses one that is too long.
func readScenario(name string) (*scenarios.Scenario, error) {
	f, err := os.Open(name)
	if errors.Is(err, os.ErrNotExist) {
		return nil, badInput("scenario %q: no such file, and the built-in ones are %s", name, strings.Join(scenarios.BuiltinNames(), ", "))
	}
	if err != nil {
		return nil, err
	}
	defer f.Close()
	if info, err := f.Stat(); err == nil && info.IsDir() {
		return nil, badInput("scenario %q is a folder, expected a YAML file (--survey FOLDER rehearses with a survey)", name)
	}
	data, err := io.ReadAll(io.LimitReader(f, 1<<20))
	if err != nil {
		return nil, err
	}
	return scenarios.Load(data, name)
}

// show prints the score.
func (c *rehearseCmd) show(con *console, score *scenarios.Score) error {
	if c.JSON {
		data, err := os.ReadFile(filepath.Join(c.Out, "results", "summary.json"))
		if err != nil {
			return err
		}
		_, err = con.out.Write(data)
		return err
	}
	con.finding("%s", score.Finding())
	if err := score.Text(con.out, 0); err != nil {
		return err
	}
	_, err := fmt.Fprintf(con.out, "folder    %s (results/report.html, results/summary.json)\n", c.Out)
	return err
}
