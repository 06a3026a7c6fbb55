package adjust

import (
	"fmt"
	"math"
	"testing"

	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// facing is two robots on parallel lines that see each other by range and bearing at every step, and a mark between them. The last
// sighting of a by b is 3 m too long.
func facing() *survey.Survey {
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "facing", Dimension: 2, Datum: survey.Datum{Name: "x"}}, Marks: []survey.Mark{{Name: "m"}}}
	line := survey.Cov{Sigma: [6]float64{0.01, 0.01, math.Inf(1), math.Inf(1), math.Inf(1), 0.002}}
	const steps = 8
	for _, id := range []string{"a", "b"} {
		r := survey.Robot{ID: id}
		for k := range int64(steps) {
			r.Keyframes = append(r.Keyframes, survey.Keyframe{Session: 1, ID: k, Pose: survey.Pose{T: [3]float64{float64(k)}, Q: [4]float64{3: 1}}})
			if k > 0 {
				r.Relatives = append(r.Relatives, survey.Relative{Session: 1, From: k - 1, To: k, Pose: survey.Pose{T: [3]float64{1}, Q: [4]float64{3: 1}}, Cov: line})
			}
		}
		s.Meta.Robots = append(s.Meta.Robots, survey.RobotMeta{ID: id, Sessions: []uint32{1}})
		s.Robots = append(s.Robots, r)
	}
	// In the frame of a, b drives along y = 4 from x = 2.
	sight := func(dx, dy float64) survey.Sight {
		return survey.Sight{Value: [3]float64{math.Hypot(dx, dy), math.Atan2(dy, dx)}, Sigma: [3]float64{0.05, 0.01, math.Inf(1)}}
	}
	for k := range int64(steps) {
		t := survey.Tie{ID: fmt.Sprintf("ab%d", k), FromRobot: "a", FromSession: 1, FromKey: k, ToRobot: "b", ToSession: 1, ToKey: k, Kind: survey.RangeBearing, Sight: sight(2, 4)}
		u := survey.Tie{ID: fmt.Sprintf("ba%d", k), FromRobot: "b", FromSession: 1, FromKey: k, ToRobot: "a", ToSession: 1, ToKey: k, Kind: survey.RangeBearing, Sight: sight(-2, -4)}
		if k == steps-1 {
			u.Sight.Value[0] += 3
		}
		s.Ties = append(s.Ties, t, u)
		for i, d := range [2][2]float64{{5 - float64(k), 2}, {3 - float64(k), -2}} {
			r := &s.Robots[i]
			r.Sightings = append(r.Sightings, survey.Sighting{Session: 1, Key: k, Mark: "m", Kind: survey.RangeBearing, Sight: sight(d[0], d[1])})
		}
	}
	return s
}

// A sighting that does not fit is left out, unless it is to be kept; then it pulls.
func TestSolveRobustKeeps(t *testing.T) {
	s := facing()
	last := len(s.Ties) - 1
	solve := func(keep func(int) bool) (cut int, chi2 float64) {
		p, err := New(s, nil)
		if err != nil {
			t.Fatal(err)
		}
		if err := p.Begin(Auto); err != nil {
			t.Fatal(err)
		}
		if err := p.Analyse(1); err != nil {
			t.Fatal(err)
		}
		res := p.SolveRobust(posegraph.DefaultOptions(), keep)
		if res.Stop != posegraph.Converged {
			t.Fatalf("ended %v", res.Stop)
		}
		for _, e := range p.Sights() {
			if e.Tie == last {
				return res.Refused, e.Set.Chi2(e.K, &p.Graph.Values)
			}
		}
		t.Fatal("the tie is not in the graph")
		return
	}
	cut, left := solve(nil)
	if cut != 1 || math.Abs(left-3600) > 40 { // 3 m over 0.05 m
		t.Errorf("%d left out, chi-square %g of the one that is wrong", cut, left)
	}
	if cut, other := solve(func(tie int) bool { return tie == 0 }); cut != 1 || math.Abs(other-left) > 0.01*left {
		t.Errorf("with another kept: %d left out, chi-square %g", cut, other)
	}
	if _, kept := solve(func(tie int) bool { return tie == last }); kept > 0.9*left {
		t.Errorf("kept, it has chi-square %g, %g when it is left out: it does not pull", kept, left)
	}
}

// The sightings of marks of a session that was ruled refused are not in the problem.
func TestRefusedSessionsSeeNoMarks(t *testing.T) {
	s := facing()
	count := func() (marks [2]int) {
		p, err := New(s, func(int) bool { return false })
		if err != nil {
			t.Fatal(err)
		}
		for _, e := range p.Sights() {
			marks[e.Robot]++
		}
		return
	}
	if got := count(); got != [2]int{8, 8} {
		t.Errorf("sightings %v", got)
	}
	s.Rulings = []survey.Ruling{{Target: survey.OnSession, Name: "b", Session: 1, Verdict: survey.RuledRefused}, {Target: survey.OnRobot, Name: "a", Verdict: survey.RuledHeld}}
	if got := count(); got != [2]int{8, 0} {
		t.Errorf("with b refused: %v", got)
	}
}
