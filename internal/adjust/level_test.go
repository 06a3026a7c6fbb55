package adjust

import (
	"math"
	"testing"

	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// Robots that know the vertical come out level: the frame of a second robot is tilted against that of the first by no more than the two
// allow, where meetings alone leave it to lean.
func TestLevelRobots(t *testing.T) {
	leaned := 0.0
	for seed := range uint64(5) {
		var tilt [2]float64
		for k := range tilt {
			y := newYard(seed, yardPlan{dimension: 3, robots: 2, keyframes: 60, encounters: 80})
			for i := range y.survey.Meta.Robots {
				y.survey.Meta.Robots[i].GravityAligned = k == 1
				y.survey.Meta.Robots[i].GravitySigma = 0.002 * float64(k)
			}
			p, err := New(&y.survey, nil)
			if err != nil {
				t.Fatal(err)
			}
			if err := p.Begin(Auto); err != nil {
				t.Fatal(err)
			}
			if err := p.Analyse(1); err != nil {
				t.Fatal(err)
			}
			if res := p.SolveRobust(posegraph.DefaultOptions(), nil); res.Stop != posegraph.Converged || p.Islands != 1 {
				t.Fatalf("seed %d: %v, %d islands", seed, res.Stop, p.Islands)
			}
			x := p.Graph.Values.Poses[p.Var[Key{Robot: "r1"}]]
			tilt[k] = math.Acos(min(1, x.R[8]))
			if front := Pose(y.survey.Robots[0].Keyframes[0].Pose); p.Graph.Values.Poses[p.Anchors[0]] != front {
				t.Errorf("seed %d: the fixed keyframe has left its place", seed)
			}
		}
		leaned = max(leaned, tilt[0])
		if tilt[1] > 4*0.002 {
			t.Errorf("seed %d: tilted by %.4f, without levels by %.4f", seed, tilt[1], tilt[0])
		}
	}
	if leaned < 4*0.002 {
		t.Errorf("without levels nothing leans by more than %.4f: the test shows nothing", leaned)
	}
}

// Where one robot of two knows the vertical, the island keeps a keyframe of that one; and two control points hold a level datum in
// space, which without the vertical takes three.
func TestTwoControlPointsAndTheVertical(t *testing.T) {
	for _, level := range []bool{false, true} {
		y := newYard(2, yardPlan{dimension: 3, robots: 2, keyframes: 60, marks: 12, controls: 2, shared: true})
		y.survey.Meta.Datum.Level = level
		y.survey.Meta.Robots[1].GravityAligned = true
		p, err := New(&y.survey, nil)
		if err != nil {
			t.Fatal(err)
		}
		if err := p.Begin(Auto); err != nil {
			t.Fatal(err)
		}
		if held := len(p.Anchors) == 0; held != level {
			t.Errorf("level datum %v: %d fixed poses", level, len(p.Anchors))
		}
		if err := p.Analyse(1); err != nil {
			t.Fatal(err)
		}
		if res := p.SolveRobust(posegraph.DefaultOptions(), nil); res.Stop != posegraph.Converged {
			t.Errorf("level datum %v: %v", level, res.Stop)
		}
		if worst := y.worst(p, !level); worst > 1 {
			t.Errorf("level datum %v: off by %.2f m", level, worst)
		}
		for i := range y.survey.Marks {
			y.survey.Marks[i].Role = survey.PlainMark
		}
		if p, err = New(&y.survey, nil); err != nil {
			t.Fatal(err)
		}
		if err := p.Begin(Auto); err != nil {
			t.Fatal(err)
		}
		if len(p.Anchors) != 1 || p.Keys[p.Anchors[0]].Robot != "r1" || p.Graph.Values.Poses[p.Anchors[0]] != Pose(y.survey.Robots[1].Keyframes[0].Pose) {
			t.Errorf("the fixed keyframe is not the first of the robot that knows the vertical: %v", p.Anchors)
		}
	}
}
