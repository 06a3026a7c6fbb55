package main

import (
	"context"
	"errors"
	"path/filepath"

	"selvage/internal/survey"
)

type convertCmd struct {
	From string `enum:"pose-tables" required:"" placeholder:"FORMAT" help:"Format of the data: pose-tables."`
	Data string `arg:"" help:"Folder with the data."`
	Out  string `short:"o" required:"" placeholder:"FOLDER" help:"Survey to write: new, empty, or a survey that is replaced."`
}

func (convertCmd) Help() string {
	return `Pose tables are two files, gzipped or not, with these columns in any order:

  keyframes.csv  id x y z qx qy qz qw
  relative.csv   from to x y z qx qy qz qw i00 i01 i02 i03 i04 i05 i11 ... i55

Metres and radians; i.. is the upper triangle of the information matrix, translation first. They become the one session of the robot r1. Nothing is written unless every line is sound.

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
	s, err := interruptible(ctx, func() (*survey.Survey, error) { return survey.ReadPoseTables(c.Data) })
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
