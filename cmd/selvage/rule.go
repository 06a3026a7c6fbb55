package main

import (
	"context"
	"errors"
	"strconv"
	"strings"
	"time"

	"selvage/internal/survey"
)

type ruleCmd struct {
	Survey  string `arg:"" help:"Folder of the survey."`
	Verdict string `arg:"" enum:"held,refused,free" help:"held (in the map whatever the evidence says), refused (out of it), or free (withdraw the ruling)."`
	Tie     string `placeholder:"ID" xor:"target" required:"" help:"Rule on a tie."`
	Robot   string `placeholder:"ID" xor:"target" required:"" help:"Rule on all ties of a robot, but for those ruled on by themselves or with their session."`
	Session string `placeholder:"ROBOT.N" xor:"target" required:"" help:"Rule on all ties of one session of a robot, but for those ruled on by themselves."`
	By      string `required:"" placeholder:"NAME" help:"Who has decided."`
	Note    string `required:"" placeholder:"TEXT" help:"Why."`
}

func (ruleCmd) Help() string {
	return `A ruling is a line in rulings.csv of the survey, and none is ever removed: the last one on a tie, robot or session counts. adjust and rehearse put it before all evidence, and say what it costs. Where the robots at the two ends of a tie are ruled differently, the tie is refused.

Example, with the survey that the example of split makes:

  selvage rule square-in-2 --tie cut00001 held --by lead --note "measured by tape as well"
`
}

// Run implements the verb.
func (c *ruleCmd) Run(ctx context.Context, con *console) error {
	m := survey.Ruling{By: c.By, Note: c.Note, Time: time.Now().UTC().Truncate(time.Second)}
	m.Verdict = map[string]survey.RulingVerdict{"held": survey.RuledHeld, "refused": survey.RuledRefused, "free": survey.RuledFree}[c.Verdict]
	switch {
	case c.Tie != "":
		m.Target, m.Name = survey.OnTie, c.Tie
	case c.Robot != "":
		m.Target, m.Name = survey.OnRobot, c.Robot
	default:
		robot, number, _ := strings.Cut(c.Session, ".")
		n, err := strconv.ParseUint(number, 10, 32)
		if err != nil || robot == "" {
			return badInput("--session %s: expected a robot, a dot and a session number, such as r1.2", c.Session)
		}
		m.Target, m.Name, m.Session = survey.OnSession, robot, uint32(n)
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	err := survey.AppendRuling(c.Survey, m)
	var bad *survey.Violations
	if errors.As(err, &bad) {
		return badInput("nothing was written:\n%w", err)
	}
	if err != nil {
		return err
	}
	if m.Verdict == survey.RuledFree {
		con.finding("%s of %s is left to the evidence again, by %s: %s.", capital(m.On()), c.Survey, m.By, m.Note)
		return nil
	}
	con.finding("%s of %s is ruled %s by %s: %s.", capital(m.On()), c.Survey, m.Verdict, m.By, m.Note)
	return nil
}

func capital(s string) string { return strings.ToUpper(s[:1]) + s[1:] }
