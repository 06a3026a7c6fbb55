package main

import (
	"fmt"
	"math"
	"path/filepath"
	"strings"
	"testing"

	"selvage/internal/survey"
)

// yard writes a survey in the plane to dir: a robot drives along the middle of a rectangle of 60 m by 30 m in a frame of its own and
// sees, without error, 24 check points on a lattice, each surveyed one centimetre off along either axis, and control points.
func yard(t *testing.T, dir string, controls [][2]float64) {
	t.Helper()
	unmeasured := math.Inf(1)
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "yard", Dimension: 2, Datum: survey.Datum{Name: "works", Level: true},
		Robots: []survey.RobotMeta{{ID: "r1", Sessions: []uint32{1}}}}}
	robot := survey.Robot{ID: "r1"}
	const step = 6.0
	for k := range int64(10) {
		pose := survey.Identity()
		pose.T[0] = step * float64(k)
		robot.Keyframes = append(robot.Keyframes, survey.Keyframe{Session: 1, ID: k, Pose: pose})
		if k > 0 {
			move := survey.Identity()
			move.T[0] = step
			robot.Relatives = append(robot.Relatives, survey.Relative{Session: 1, From: k - 1, To: k, Pose: move,
				Cov: survey.Cov{Sigma: [6]float64{0.02, 0.02, unmeasured, unmeasured, unmeasured, 0.01}}})
		}
	}
	mark := func(name string, role survey.Role, x, y, surveyedX, surveyedY float64) {
		s.Marks = append(s.Marks, survey.Mark{Name: name, Role: role, T: [3]float64{surveyedX, surveyedY}, Sigma: [3]float64{0.003, 0.003, unmeasured}})
		for k := range robot.Keyframes {
			// The frame of the robot begins at (3, 15) of the datum and is turned by a right angle: its x axis is the datum's y.
			// The robot drives along its x axis, so the yard lies along the datum's y too.
			at := [3]float64{y - 3 - robot.Keyframes[k].Pose.T[0], -(x - 15), 0}
			robot.Sightings = append(robot.Sightings, survey.Sighting{Session: 1, Key: int64(k), Mark: name, Kind: survey.Position,
				Sight: survey.Sight{Value: at, Sigma: [3]float64{0.02, 0.02, unmeasured}}})
		}
	}
	for i := range 24 {
		x, y := 4+7.3*float64(i%4), 5+10*float64(i/4)
		mark(fmt.Sprintf("c%d", i), survey.CheckPoint, x, y, x+0.01*float64(1-2*(i%2)), y+0.01*float64(1-2*(i/4%2)))
	}
	for i, c := range controls {
		x, y := 30*float64(i%2), 60*float64(i/2)/3
		mark(fmt.Sprintf("k%d", i), survey.ControlPoint, x, y, x+c[0], y+c[1])
	}
	s.Robots = []survey.Robot{robot}
	if err := survey.Write(filepath.Join(dir, "yard"), s); err != nil {
		t.Fatal(err)
	}
}

// Placed on control points of which one is two metres wrong, the map is tested at its check points, and the standard is quoted.
func TestAdjustPlacesOnControl(t *testing.T) {
	dir := t.TempDir()
	yard(t, dir, [][2]float64{{}, {}, {}, {2, 0}, {}, {}, {}})
	a := selvage(t, dir, "adjust", "yard", "--place", "robust")
	a.want(t, 0)
	for _, says := range []string{
		"The map was placed on 6 control points after an adjustment without them",
		"k3 (2.00 m) contradicts the others and did not count.",
		"Tested 0.024 metres horizontal accuracy at 95% confidence level.", // 1.7308 times sqrt 2 centimetres
		"ASPRS edition 2 (2023) asks for at least 30 check points; there are 24.",
	} {
		if !strings.Contains(a.stdout, says) {
			t.Errorf("no %q in\n%s", says, a.stdout)
		}
	}
	x := adjustJSON(t, 0, dir, "yard", "--place", "robust").Positions
	if x == nil || len(x.Control) != 7 || len(x.Check) != 24 || len(x.Statements) != 1 || !x.Statements[0].Claimed {
		t.Fatalf("%+v", x)
	}
	if math.Abs(*x.RMSERadialM-0.01*math.Sqrt2) > 1e-6 || math.Abs(float64(x.X.RMSE)-0.01) > 1e-6 || x.Z != nil || x.Vertical95M != nil {
		t.Errorf("radial %g, x %+v, z %v", *x.RMSERadialM, x.X, x.Z)
	}
	if text := read(t, dir, "yard", "results", "poses.csv"); !strings.Contains(text, "on which the map was placed as a whole") {
		t.Errorf("the poses do not say what holds the datum: %.200s", text)
	}
	a = selvage(t, dir, "audit", "yard", "--place", "robust")
	a.want(t, 0)
	for _, says := range []string{"k3 (2.00 m) contradicts the others and did not count.", "Tested 0.024 metres horizontal accuracy at 95% confidence level.", "was not decided: what is less than a relative pose takes part"} {
		if !strings.Contains(a.stdout, says) || !strings.Contains(read(t, dir, "yard", "results", "audit.html"), says) {
			t.Errorf("no %q on the terminal or the page of the audit:\n%s", says, a.stdout)
		}
	}
	// As priors, sound control points give the same map.
	yard(t, dir+"/held", make([][2]float64, 7))
	if x := adjustJSON(t, 0, dir, "held/yard").Positions; x.Placed != nil || math.Abs(*x.RMSERadialM-0.01*math.Sqrt2) > 1e-6 {
		t.Errorf("control points as priors: radial %g", *x.RMSERadialM)
	}
}

// Without control points nothing is said of positions, and there is nothing to place the map on.
func TestAdjustWithoutControl(t *testing.T) {
	dir := t.TempDir()
	yard(t, dir, nil)
	a := selvage(t, dir, "adjust", "yard")
	a.want(t, 0)
	if says := "24 check points are in a map that is not in the datum, for no control point was seen: they say nothing of its positions."; !strings.Contains(a.stdout, says) || strings.Contains(a.stdout, "Tested") {
		t.Errorf("want %q and no accuracy in\n%s", says, a.stdout)
	}
	selvage(t, dir, "adjust", "yard", "--place", "robust").want(t, 2, "--place robust, but no control point was seen; nothing was written")
	selvage(t, dir, "audit", "yard", "--place", "robust").want(t, 2, "--place robust, but no control point was seen; nothing was written")
	selvage(t, dir, "adjust", "yard", "--place", "check").want(t, 2, `must be one of`)
}

// The island that control points hold is the datum, however many sessions hang together elsewhere.
func TestAdjustDatumIsControl(t *testing.T) {
	dir := t.TempDir()
	yard(t, dir, make([][2]float64, 7))
	folder := filepath.Join(dir, "yard")
	s, err := survey.Read(folder)
	if err != nil {
		t.Fatal(err)
	}
	for _, id := range []string{"r2", "r3"} {
		s.Meta.Robots = append(s.Meta.Robots, survey.RobotMeta{ID: id, Sessions: []uint32{1}})
		s.Robots = append(s.Robots, survey.Robot{ID: id, Keyframes: s.Robots[0].Keyframes, Relatives: s.Robots[0].Relatives})
	}
	tie := survey.Tie{ID: "t1", FromRobot: "r2", FromSession: 1, FromKey: 3, ToRobot: "r3", ToSession: 1, ToKey: 4, Pose: survey.Identity(), Cov: s.Robots[0].Relatives[0].Cov}
	s.Ties = append(s.Ties, tie)
	if err := survey.Write(folder, s); err != nil {
		t.Fatal(err)
	}
	for _, how := range [][]string{nil, {"--place", "robust"}} {
		a := selvage(t, dir, append([]string{"adjust", "yard", "--all-ties"}, how...)...)
		a.want(t, 0)
		text := read(t, dir, "yard", "results", "datum_from_session.csv")
		if !strings.Contains(a.stdout, "1 of 3 sessions lies in the datum") || !strings.Contains(text, "\nr1,1,true,0,") || !strings.Contains(text, "\nr2,1,false,1,") {
			t.Errorf("%v:\n%s\n%s", how, a.stdout, text)
		}
	}
}
