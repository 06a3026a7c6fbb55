package main

import (
	"fmt"

	"selvage/internal/survey"
)

// logFlags are the flags of convert that belong to a sighting log; those not given are nil or empty.
type logFlags struct {
	FromS *float64 `placeholder:"S" help:"Sighting log: begin at this time of the log, s (default: its beginning)."`
	ToS   *float64 `placeholder:"S" help:"End at this time of the log, s (default: its end)."`

	LagS     *float64 `placeholder:"S" help:"A command takes effect so much later, s (default 0.2)."`
	EarlierS *float64 `placeholder:"S" help:"A sighting shows what was so much before its stamp, s (default 0.05)."`

	EveryM   *float64 `placeholder:"M" help:"A keyframe after so many metres driven (default 0.5), and at every sighting."`
	EveryRad *float64 `placeholder:"RAD" help:"A keyframe after so many radians turned (default 0.5)."`
	EveryS   *float64 `placeholder:"S" help:"A keyframe after so many seconds (default 10)."`

	OdometryForward  *float64 `placeholder:"SIGMA" help:"Error of the way, m per root of a metre driven (default 0.07)."`
	OdometrySideways *float64 `placeholder:"SIGMA" help:"Error across the way, m per root of a metre driven (default 0.04)."`
	OdometryDrift    *float64 `placeholder:"SIGMA" help:"Error of the heading, rad per root of a metre driven (default 0.05)."`
	OdometryTurn     *float64 `placeholder:"SIGMA" help:"Error of the heading, rad per root of a radian turned (default 0.15)."`
	SigmaRange       *float64 `placeholder:"M" help:"Sigma of a range, m (default 0.15)."`
	SigmaBearing     *float64 `placeholder:"RAD" help:"Sigma of a bearing, rad (default 0.02)."`

	NoRobots  bool     `help:"Leave sightings of robots out."`
	Marks     string   `enum:",shared,private,none" default:"" placeholder:"USE" help:"Landmarks: shared (one mark for all robots, the default), private (marks of each robot, named ROBOT.mN), or none."`
	Landmarks string   `enum:",check,control,mark" default:"" placeholder:"ROLE" help:"Role of landmarks whose place is known: check (the default), control, or mark (the place is left out)."`
	ThinS     *float64 `placeholder:"S" help:"Least time between two sightings of one subject by one robot that are kept, s (default 0)."`

	InjectWrong    *float64 `placeholder:"SHARE" help:"Make the identity of this share of the sightings wrong, to try what finds them."`
	InjectMeetings bool     `help:"Whole meetings instead of single sightings (with --inject-wrong)."`
	Seed           *uint64  `placeholder:"N" help:"Which ones (with --inject-wrong; default 1)."`
}

// options returns what was asked for.
func (f *logFlags) options() (survey.SightingLogOptions, error) {
	o := survey.DefaultSightingLogOptions()
	for _, x := range []struct{ given, to *float64 }{
		{f.FromS, &o.FromS}, {f.ToS, &o.ToS}, {f.LagS, &o.LagS}, {f.EarlierS, &o.EarlierS},
		{f.EveryM, &o.EveryM}, {f.EveryRad, &o.EveryRad}, {f.EveryS, &o.EveryS},
		{f.OdometryForward, &o.Odometry.Forward}, {f.OdometrySideways, &o.Odometry.Sideways}, {f.OdometryDrift, &o.Odometry.Drift}, {f.OdometryTurn, &o.Odometry.Turn},
		{f.SigmaRange, &o.SigmaRange}, {f.SigmaBearing, &o.SigmaBearing}, {f.ThinS, &o.ThinS}, {f.InjectWrong, &o.Wrong.Share},
	} {
		if x.given != nil {
			*x.to = *x.given
		}
	}
	o.Robots = !f.NoRobots
	switch f.Marks {
	case "private":
		o.Marks = survey.PrivateMarks
	case "none":
		o.Marks = survey.NoMarks
	}
	switch f.Landmarks {
	case "control":
		o.Role = survey.ControlPoint
	case "mark":
		o.Role = survey.PlainMark
	}
	o.Wrong.Meetings, o.Wrong.Seed = f.InjectMeetings, 1
	if f.Seed != nil {
		o.Wrong.Seed = *f.Seed
	}
	if f.InjectWrong == nil && (f.InjectMeetings || f.Seed != nil) {
		return o, badInput("--inject-meetings and --seed go with --inject-wrong")
	}
	return o, nil
}

// readLog reads a sighting log and turns it into a survey.
func (c *convertCmd) readLog() (*survey.Survey, string, error) {
	o, err := c.options()
	if err != nil {
		return nil, "", err
	}
	l, err := survey.ReadSightingLog(c.Data)
	if err != nil {
		return nil, "", err
	}
	s, n, err := l.Survey(o)
	if err != nil {
		return nil, "", err
	}
	keyframes, sightings := 0, 0
	for i := range s.Robots {
		keyframes += len(s.Robots[i].Keyframes)
		sightings += len(s.Robots[i].Sightings)
	}
	text := fmt.Sprintf("%s of %s, %s between robots and %s of %s", counted(keyframes, "keyframe"), counted(len(s.Robots), "robot"),
		counted(len(s.Ties), "tie"), counted(sightings, "sighting"), counted(len(s.Marks), "mark"))
	for _, left := range []struct {
		n   int
		why string
	}{{n.Unknown, "of nobody known"}, {n.Outside, "outside the tracks"}, {n.Unasked, "not asked for"}, {n.Thinned, "too soon after the last"}} {
		if left.n > 0 {
			text += fmt.Sprintf("; %s left out, %s", counted(left.n, "sighting"), left.why)
		}
	}
	if o.Wrong.Share > 0 {
		text += fmt.Sprintf("; the identity of %d was made wrong on purpose", n.Changed)
	}
	return s, text, nil
}
