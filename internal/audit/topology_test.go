package audit

import (
	"fmt"
	"math"
	"slices"
	"testing"

	"selvage/internal/survey"
)

// tracks makes two robots that drove 100 m along x side by side, 201 keyframes each without any error, with ties at the given
// keyframes. Sigmas: odometry 1 cm and 0.1 degrees, ties 5 cm and 0.5 degrees.
func tracks(dim int, at ...int64) (*survey.Survey, []survey.ResultVerdict) {
	const degree = math.Pi / 180
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "tracks", Dimension: dim, Datum: survey.Datum{Name: "d"}}}
	step := survey.Identity()
	step.T[0] = 0.5
	for _, id := range []string{"a", "b"} {
		r := survey.Robot{ID: id}
		for k := range int64(201) {
			x := survey.Identity()
			x.T[0] = 0.5 * float64(k)
			r.Keyframes = append(r.Keyframes, survey.Keyframe{ID: k, Pose: x})
			if k > 0 {
				r.Relatives = append(r.Relatives, survey.Relative{From: k - 1, To: k, Pose: step, Cov: survey.Uncorrelated(0.01, 0.1*degree)})
			}
		}
		s.Robots = append(s.Robots, r)
	}
	var verdicts []survey.ResultVerdict
	for i, k := range at {
		id := fmt.Sprintf("t%d", i)
		s.Ties = append(s.Ties, survey.Tie{ID: id, FromRobot: "a", FromKey: k, ToRobot: "b", ToKey: k, Pose: survey.Identity(), Cov: survey.Uncorrelated(0.05, 0.5*degree)})
		verdicts = append(verdicts, survey.ResultVerdict{Tie: id, Verdict: "held"})
	}
	return s, verdicts
}

// Topologies whose figures were computed by a separate program: within 1 %.
func TestTopologies(t *testing.T) {
	for _, c := range []struct {
		ties        []int64
		tie         int
		translation float64 // redundancy
		largest     float64 // detectable error, m
	}{
		{[]int64{100, 100}, 0, 0.5, 0.292},
		{[]int64{100, 110}, 0, 0.3245, 0.371},
		{[]int64{50, 150}, 0, 0.0398, 2.05},
		{[]int64{0, 200}, 0, 0.0195, 4.96},
		{[]int64{0, 100, 200}, 1, 0.0771, 1.30},
	} {
		s, verdicts := tracks(3, c.ties...)
		a := run(t, s, verdicts)
		x := &a.Ties[c.tie]
		what := fmt.Sprint(c.ties)
		near(t, what+" redundancy", *x.RedundancyTranslation, c.translation, 0.01*c.translation)
		near(t, what+" detectable", *x.DetectableM, c.largest, 0.01*c.largest)
		if want := []string{"t0", "t1"}; len(c.ties) == 2 && (len(a.Sets) != 1 || !slices.Equal(a.Sets[0].Ties, want) || x.Set != 1) {
			t.Errorf("%s: sets %+v, want one of both ties", what, a.Sets)
		}
		if one := c.ties[1]-c.ties[0] <= 10; (len(a.Places) == 1) != one || x.Place != one || len(a.Bridges) != 0 {
			t.Errorf("%s: places %+v, bridges %v", what, a.Places, a.Bridges)
		}
		plane, verdicts := tracks(2, c.ties...)
		near(t, what+" detectable in the plane", *run(t, plane, verdicts).Ties[c.tie].DetectableM, c.largest, 0.01*c.largest)
	}
}

// Two ties of one keyframe share an error equally: the map moves by half of it, and turns by half of it.
func TestDoubleTie(t *testing.T) {
	s, verdicts := tracks(3, 100, 100)
	in := Input{Survey: s, Verdicts: verdicts}
	w := &work{ctx: t.Context(), in: &in, s: s}
	for _, do := range []func() error{w.build, w.adjust, w.search, w.test, w.effects} {
		if err := do(); err != nil {
			t.Fatal(err)
		}
	}
	x := &w.out.Ties[0]
	near(t, "detectable turn, degrees", *x.DetectableRad*180/math.Pi, 2.92, 0.0292)
	near(t, "redundancy of rotation", *x.RedundancyRotation, 0.5, 1e-6)
	// Turned by half of what is detectable, the far end of 50 m of track moves most.
	near(t, "shift", x.Shift.M, 50**x.DetectableRad/2, 1e-6)
	for c := 3; c < 6; c++ { // errors of translation alone
		x.Detectable[c] = Figure(math.NaN())
	}
	w.follow([]*Tie{x}, w.newComparison([]*Tie{x}))
	near(t, "shift by an error of translation", x.Shift.M, 0.146, 0.00146)
}

// A single tie is checked by nothing and says so in every place.
func TestSingleTie(t *testing.T) {
	s, verdicts := tracks(3, 100)
	a := run(t, s, verdicts)
	x := &a.Ties[0]
	if x.Status != Unchecked || !x.Bridge || !x.Place || x.T != nil || x.DetectableM != nil || x.Shift != nil || *x.Redundancy != 0 {
		t.Errorf("%+v", x)
	}
	if !slices.Equal(a.Bridges, []string{"t0"}) || len(a.Places) != 1 || !slices.Equal(a.Places[0].Parts, []string{"b"}) {
		t.Errorf("bridges %v, places %+v", a.Bridges, a.Places)
	}
	if want := "1 tie holds the map together: 1 that nothing checks."; a.Finding() != want {
		t.Errorf("finding %q, want %q", a.Finding(), want)
	}
	if len(a.Next) != 1 || a.Next[0].Helps != "t0" || a.Next[0].BeforeM != nil || a.Next[0].Unchecked != 0 {
		t.Errorf("next %+v, want a tie elsewhere between the two", a.Next)
	}
}

// A wrong tie among sound ones fails, makes others fail with it, and is the one to be removed.
func TestWrongTie(t *testing.T) {
	s, verdicts := tracks(2, 0, 40, 80, 120, 160, 200)
	s.Ties[2].Pose.T[1] = 1.5
	a := run(t, s, verdicts)
	failed := 0
	for k := range a.Ties {
		if a.Ties[k].Status == Failed {
			failed++
		}
	}
	if failed < 2 || !slices.Equal(a.Removal, []string{"t2"}) {
		t.Errorf("%d failed, to be removed %v, want several and t2", failed, a.Removal)
	}
	verdicts[2].Verdict = "refused"
	a = run(t, s, verdicts)
	if x := &a.Ties[2]; x.Status != Contradicts || len(a.Removal) != 0 || math.Abs(*x.ApartM-1.5) > 1e-6 {
		t.Errorf("refused: %+v, to be removed %v", x, a.Removal)
	}
}

// Surveys with little in them: keyframes that nothing joins, and one keyframe in all.
func TestLittle(t *testing.T) {
	for _, n := range []int{1, 3} {
		s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "little", Dimension: 2, Datum: survey.Datum{Name: "d"}}, Robots: []survey.Robot{{ID: "a"}, {ID: "b"}}}
		for k := range n {
			s.Robots[0].Keyframes = append(s.Robots[0].Keyframes, survey.Keyframe{ID: int64(k), Pose: survey.Identity()})
		}
		a := run(t, s, nil)
		if len(a.Islands) != n || !a.Adjustment.Converged() || a.Adjustment.DoF != 0 {
			t.Errorf("%d keyframes: %d islands, %+v", n, len(a.Islands), a.Adjustment)
		}
		if err := a.Write(t.TempDir(), "today", "test"); err != nil {
			t.Error(err)
		}
	}
	if _, err := Run(t.Context(), Input{Survey: &survey.Survey{Meta: survey.Meta{Dimension: 3}}}); err == nil {
		t.Error("a survey without keyframes was audited")
	}
}

// Ties that do not measure a turn: several join two robots, one alone does not.
func TestTiesWithoutTurn(t *testing.T) {
	s, verdicts := tracks(2, 0, 100, 200)
	for k := range s.Ties {
		s.Ties[k].Cov.Sigma[5] = math.Inf(1)
	}
	a := run(t, s, verdicts)
	for k := range a.Ties {
		if x := &a.Ties[k]; x.Status != Passed || x.DoF < 1 || x.DoF > 2 || x.RedundancyRotation != nil || x.DetectableRad != nil {
			t.Errorf("%+v", x)
		}
	}
	if len(a.Loops) != 0 || !a.unclosed {
		t.Errorf("loops %+v", a.Loops)
	}
}
