// Command selvage makes one map out of the maps of several robots: it runs fleets, rehearses outings, and adjusts, audits, converts and splits
// surveys.
//
// Each verb is one file with one struct: its fields are the flags, Run does the work. This file builds what every verb is handed,
// a context that ends at an interrupt and the console, and exit.go turns the outcome into an exit code.
package main

import (
	"context"
	"os"
	"os/signal"
	"syscall"

	"github.com/alecthomas/kong"
)

const about = "Selvage makes one map in one datum out of what several robots recorded on one site."

// cli is the command line.
type cli struct {
	LogLevel string           `enum:"debug,info,warn,error" default:"info" placeholder:"LEVEL" help:"Log from this level on: debug, info (the default), warn or error."`
	Version  kong.VersionFlag `help:"Print the version and stop."`

	Rehearse   rehearseCmd   `cmd:"" help:"Run a whole fleet on a virtual clock and score it."`
	Adjust     adjustCmd     `cmd:"" help:"Adjust a whole survey in one piece."`
	Audit      auditCmd      `cmd:"" help:"Tell how far every tie of a finished survey is checked, and where to go next."`
	Split      splitCmd      `cmd:"" help:"Cut the survey of one robot into connected pieces."`
	Convert    convertCmd    `cmd:"" help:"Turn data in another format into a survey."`
	Enrol      enrolCmd      `cmd:"" help:"Make keys, certificates and a ready folder for the base and each robot of a fleet."`
	Bus        busCmd        `cmd:"" help:"Run the bus of a fleet alone."`
	Coordinate coordinateCmd `cmd:"" help:"Run the coordinator at the base, with the bus or on one elsewhere."`
	Agent      agentCmd      `cmd:"" help:"Run the agent on a robot."`
	Status     statusCmd     `cmd:"" help:"Tell where a running fleet stands and what is in doubt."`
	Rule       ruleCmd       `cmd:"" help:"Hold or refuse a tie, or all ties of a robot or session, whatever the evidence says."`
	Show       versionCmd    `cmd:"" name:"version" help:"Print the version of the program."`
}

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	context.AfterFunc(ctx, stop) // a second interrupt ends the program at once

	var line cli
	con := newConsole()
	parser := kong.Must(&line, kong.Name("selvage"), kong.Description(about), kong.Vars{"version": version()},
		kong.ConfigureHelp(kong.HelpOptions{Compact: true, WrapUpperBound: 100}))
	args := os.Args[1:]
	if len(args) == 0 {
		parser.Stdout = os.Stderr
		parser.Exit = func(int) { os.Exit(exitInput) }
		args = []string{"--help"}
	}
	verb, err := parser.Parse(args)
	if err != nil {
		os.Exit(con.fail(badInput("%w (selvage --help, or --help behind a verb, tells what there is)", err)))
	}
	con.log = newLogger(line.LogLevel)
	verb.BindTo(ctx, (*context.Context)(nil))
	os.Exit(con.fail(verb.Run(con)))
}
