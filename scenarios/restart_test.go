package scenarios

import (
	"path/filepath"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/survey"
)

func TestRestartsBeginSessions(t *testing.T) {
	_, w := world(t, "mine", 2, func(sc *Scenario) {
		sc.FrontEnd.Restarts = []RestartSpec{{"r02", 2000}, {"r02", 1000}, {"r05", 1500}, {"r05", 0.5}, {"r01", 28000}}
	})
	_, plain := world(t, "mine", 2, nil)
	if err := soundFeed(w); err != nil {
		t.Fatal(err)
	}
	if err := survey.Write(filepath.Join(t.TempDir(), "s"), w.Survey); err != nil {
		t.Fatal(err)
	}
	first := map[string][]int{} // row of the first keyframe of each session
	for r, robot := range w.Survey.Robots {
		want := map[string]int{"r02": 3, "r05": 2}[robot.ID]
		if want == 0 {
			want = 1
		}
		if got := len(w.Survey.Meta.Robots[r].Sessions); got != want {
			t.Errorf("%s has %d sessions, want %d", robot.ID, got, want)
		}
		if len(robot.Keyframes) != len(plain.Survey.Robots[r].Keyframes) {
			t.Errorf("%s takes another way because of a restart", robot.ID)
		}
		for i, k := range robot.Keyframes {
			if k.ID != 0 {
				continue
			}
			first[robot.ID] = append(first[robot.ID], i)
			if k.Pose != survey.Identity() || int(k.Session) != len(first[robot.ID]) {
				t.Errorf("%s: session %d starts at %v", robot.ID, k.Session, k.Pose)
			}
			if i > 0 {
				restart := seconds(map[string][]float64{"r02": {1000, 2000}, "r05": {1500}}[robot.ID][k.Session-2])
				if before := robot.Keyframes[i-1].StampNS; before >= restart || k.StampNS < restart {
					t.Errorf("%s: session %d starts at %d after %d, restart %d", robot.ID, k.Session, k.StampNS, before, restart)
				}
			}
		}
	}
	steps := 0
	for _, m := range w.Survey.Robots[1].Relatives {
		if m.Kind == survey.Odometry {
			steps++
		}
	}
	if want := len(w.Survey.Robots[1].Keyframes) - 3; steps != want {
		t.Errorf("r02 has %d steps, want %d: none across a restart", steps, want)
	}
	own := 0
	sum, n := 0.0, 0
	for i, tie := range w.Survey.Ties {
		if !w.TieTrue[i] {
			continue
		}
		if tie.FromRobot == tie.ToRobot {
			own++
		}
		sum += chi2(t, at(w, first, tie.FromRobot, tie.FromSession, tie.FromKey), at(w, first, tie.ToRobot, tie.ToSession, tie.ToKey), tie.Pose, tie.Cov, 3)
		n++
	}
	consistent(t, "ties between sessions", sum, n, 6)
	if own < 5 {
		t.Errorf("%d ties join sessions of one robot", own)
	}
	for _, truth := range w.Survey.Truth {
		if p := at(w, first, truth.Robot, truth.Session, truth.Key); p.T != truth.Pose.T {
			t.Fatalf("the truth of %s, session %d, keyframe %d is off", truth.Robot, truth.Session, truth.Key)
		}
	}
}

// at returns the true pose of a keyframe.
func at(w *World, first map[string][]int, robot string, session uint32, key int64) *lie.SE3 {
	r, _ := robotNumber(robot)
	return &w.tracks[r].pose[first[robot][session-1]+int(key)]
}
