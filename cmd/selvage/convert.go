package main

import (
	"context"
	"errors"
	"path/filepath"

	"selvage/internal/survey"
)

type convertCmd struct {
	From string `enum:"pose-tables,sighting-log" required:"" placeholder:"FORMAT" help:"Format of the data: pose-tables or sighting-log."`
	Data string `arg:"" help:"Folder with the data."`
	Out  string `short:"o" required:"" placeholder:"FOLDER" help:"Survey to write: new, empty, or a survey that is replaced."`

	logFlags `embed:""`
}

func (convertCmd) Help() string {
	return `Pose tables are two files, gzipped or not, with these columns in any order:

  keyframes.csv  id x y z qx qy qz qw
  relative.csv   from to x y z qx qy qz qw i00 i01 i02 i03 i04 i05 i11 ... i55

Metres and radians; i.. is the upper triangle of the information matrix, translation first. They become the one session of the robot r1. Nothing is written unless every line is sound.

A sighting log is what wheeled robots on one floor were told to drive, and what they have seen by range and bearing, on one clock:

  odometry.csv         robot t_s v_mps w_radps                  held until the next row of the robot
  observations.csv     observer t_s subject range_m bearing_rad  a robot, another number for a landmark, or 0
  landmarks_truth.csv  subject x_m y_m x_sd_m y_sd_m            optional
  truth.csv            robot t_s x_m y_m theta_rad              optional
  run.json             time_origin_unix_s                       optional

Robot N becomes rN, and landmark N the mark mN; commands become odometry by dead reckoning, sightings of robots ties of kind range_bearing, those of landmarks sightings of marks.

Example, with four poses on a square and its tables made first:

  mkdir -p tables
  printf '%s\n' id,x,y,z,qx,qy,qz,qw 0,0,0,0,0,0,0,1 1,2,0,0,0,0,0,1 2,2,2,0,0,0,0,1 3,0,2,0,0,0,0,1 > tables/keyframes.csv
  w=400,0,0,0,0,0,400,0,0,0,0,0,0,0,0,0,0,0,0,0,2500
  printf '%s\n' from,to,x,y,z,qx,qy,qz,qw,i00,i01,i02,i03,i04,i05,i11,i12,i13,i14,i15,i22,i23,i24,i25,i33,i34,i35,i44,i45,i55 \
    0,1,2.01,0,0,0,0,0,1,$w 1,2,0,2.02,0,0,0,0,1,$w 2,3,-2.01,0,0,0,0,0,1,$w 3,0,0,-1.99,0,0,0,0,1,$w > tables/relative.csv
  selvage convert --from pose-tables tables -o square
`
}

// Run implements the verb.
func (c *convertCmd) Run(ctx context.Context, con *console) error {
	p := con.progress()
	defer p.end()
	p.begin("reading " + c.Data)
	holds := ""
	s, err := interruptible(ctx, func() (s *survey.Survey, err error) {
		if c.From == "sighting-log" {
			s, holds, err = c.readLog()
			return s, err
		}
		if c.logFlags != (logFlags{}) {
			return nil, badInput("%s goes without the flags of a sighting log", c.From)
		}
		return survey.ReadPoseTables(c.Data)
	})
	var bad *survey.Violations
	if errors.As(err, &bad) {
		const shown = 5
		text := ""
		for _, v := range bad.List[:min(len(bad.List), shown)] {
			text += "\n  " + v.String()
		}
		if bad.Total > shown {
			text += "\n  ..."
		}
		return badInput("%s: %d places are wrong, nothing was written%s", c.Data, bad.Total, text)
	}
	if err != nil {
		return err
	}
	if at, err := filepath.Abs(c.Data); err == nil {
		s.Meta.Name = filepath.Base(at)
	}
	p.begin("writing " + c.Out)
	if err := survey.Write(c.Out, s); err != nil {
		return err
	}
	p.end()
	con.warn(s.Warnings)
	if c.From == "sighting-log" {
		con.finding("%s holds %s.", c.Out, holds)
		return nil
	}
	closures := 0
	r := &s.Robots[0]
	for i := range r.Relatives {
		if r.Relatives[i].Kind == survey.Closure {
			closures++
		}
	}
	where := "space"
	if s.Meta.Dimension == 2 {
		where = "the plane"
	}
	con.finding("%s holds %d keyframes in %s, %s of odometry and %s.", c.Out, len(r.Keyframes), where,
		counted(len(r.Relatives)-closures, "measurement"), counted(closures, "loop closure"))
	return nil
}
