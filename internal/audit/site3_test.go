package audit

import (
	"context"
	"encoding/csv"
	"fmt"
	"math"
	"os"
	"strconv"
	"testing"

	"selvage/internal/survey"
)

// The worked example with three robots, of which testdata/site3 of package partition tells; figures from a separate prototype.

func table(t testing.TB, name string) [][]float64 {
	t.Helper()
	f, err := os.Open("../../partition/testdata/site3/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out [][]float64
	for _, row := range rows[1:] {
		numbers := make([]float64, len(row))
		for i, s := range row {
			if numbers[i], err = strconv.ParseFloat(s, 64); err != nil {
				t.Fatal(err)
			}
		}
		out = append(out, numbers)
	}
	return out
}

func tabledPose(c []float64) survey.Pose {
	return survey.Pose{T: [3]float64(c[:3]), Q: [4]float64{c[4], c[5], c[6], c[3]}}
}

func tabledCov(c []float64) survey.Cov { return survey.Cov{Sigma: [6]float64(c[:6])} }

// site3 reads the survey, and holds the true ties.
func site3(t testing.TB) (*survey.Survey, []survey.ResultVerdict) {
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "site3", Dimension: 3, Datum: survey.Datum{Name: "site"}}}
	for r := range 3 {
		id := fmt.Sprintf("r%d", r)
		s.Meta.Robots = append(s.Meta.Robots, survey.RobotMeta{ID: id, Sessions: []uint32{1}})
		s.Robots = append(s.Robots, survey.Robot{ID: id})
	}
	for _, c := range table(t, "poses.csv") {
		r := &s.Robots[int(c[0])]
		r.Keyframes = append(r.Keyframes, survey.Keyframe{Session: 1, ID: int64(c[1]), Pose: tabledPose(c[2:])})
	}
	for _, c := range table(t, "edges.csv") {
		r := &s.Robots[int(c[0])]
		m := survey.Relative{Session: 1, From: int64(c[1]), To: int64(c[2]), Pose: tabledPose(c[3:]), Cov: tabledCov(c[10:])}
		if m.To != m.From+1 {
			m.Kind = survey.Closure
		}
		r.Relatives = append(r.Relatives, m)
	}
	var verdicts []survey.ResultVerdict
	for _, c := range table(t, "ties.csv") {
		s.Ties = append(s.Ties, survey.Tie{ID: fmt.Sprintf("t%d", int(c[0])), FromRobot: fmt.Sprintf("r%d", int(c[1])), FromSession: 1, FromKey: int64(c[2]),
			ToRobot: fmt.Sprintf("r%d", int(c[3])), ToSession: 1, ToKey: int64(c[4]), Pose: tabledPose(c[5:]), Cov: tabledCov(c[12:])})
		v := survey.ResultVerdict{Tie: s.Ties[len(s.Ties)-1].ID, Verdict: "held", Reason: "true"}
		if c[18] != 1 {
			v.Verdict, v.Reason = "refused", "false"
		}
		verdicts = append(verdicts, v)
	}
	return s, verdicts
}

func run(t testing.TB, s *survey.Survey, verdicts []survey.ResultVerdict) *Audit {
	t.Helper()
	a, err := Run(context.Background(), Input{Survey: s, Verdicts: verdicts, Decided: "the test"})
	if err != nil {
		t.Fatal(err)
	}
	return a
}

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: %.10g, want %.10g", what, got, want)
	}
}

func TestSite3(t *testing.T) {
	s, verdicts := site3(t)
	a := run(t, s, verdicts)
	near(t, "T", a.Adjustment.T, 2*38.8085219845, 1e-6)
	x := &a.Ties[0]
	near(t, "tie 0: redundancy", *x.Redundancy, 0.301612, 1e-3)
	near(t, "tie 0: T", *x.T, 6.94807, 1e-3)
	near(t, "tie 0: w_z", float64(x.W[2]), -1.4027, 1e-3)
	near(t, "tie 0: detectable x", float64(x.Detectable[0]), 0.40839, 1e-3)
	near(t, "tie 0: shift", x.Shift.M, 0.1955, 1e-3)
	x = &a.Ties[3]
	near(t, "tie 3: redundancy", *x.Redundancy, 0.600912, 1e-3)
	near(t, "tie 3: T", *x.T, 10.75939, 1e-3)
	near(t, "tie 3: w_x", float64(x.W[0]), 2.7867, 1e-3)
	for k := range a.Ties {
		x := &a.Ties[k]
		if want := map[string]Status{"held": Passed, "refused": Contradicts}[x.Verdict]; x.Status != want {
			t.Errorf("%s, %s: %s", x.ID, x.Verdict, x.Status)
		}
		if x.T != nil && *x.T > *a.Ties[3].T && x.held {
			t.Errorf("%s has a larger T than t3", x.ID)
		}
	}
	if n := len(a.Loops); n != 10 { // 12 ties, two of them in the tree
		t.Errorf("%d loops", n)
	}
	// Two ties between robots 0 and 1 close a loop whose misclosure is the pairwise consistency of the two.
	for i, want := range map[int]float64{0: 5.3754, 1: 3.925} {
		near(t, "loop of t0 and "+a.Loops[i].Tie, a.Loops[i].T, want, 1e-2)
	}
	sum := 0.0
	for _, x := range a.Spread {
		sum += x.Redundancy
	}
	near(t, "sum of redundancies", sum, 72, 1e-4)
	if !a.Arrived {
		t.Error("the real spread did not settle")
	}
}
