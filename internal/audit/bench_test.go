package audit

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/survey"
)

// blocks makes robots that drive about a city of square blocks of 20 m, a keyframe every half metre, with closures where a robot comes
// back to a crossing and ties where it meets the track of another.
func blocks(robots, keyframes, ties int) (*survey.Survey, []survey.ResultVerdict) {
	const (
		side  = 40   // half metres
		width = 20   // blocks
		every = 1900 // keyframes between closures, about
	)
	r := rand.New(rand.NewPCG(1, 2))
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "blocks", Dimension: 3, Datum: survey.Datum{Name: "city"}}}
	cov, wide := survey.Uncorrelated(0.02, 0.002), survey.Uncorrelated(0.1, 0.01)
	measured := func(a, b *lie.SE3, t, phi float64) survey.Pose {
		z := drawPose(r, a.Between(*b), 3, t, phi)
		return adjust.Folder(&z)
	}
	type stop struct {
		robot int
		key   int64
	}
	at := map[[2]int][]stop{} // crossing -> who was there
	truth := make([][]lie.SE3, robots)
	for i := range robots {
		robot := survey.Robot{ID: fmt.Sprintf("r%02d", i)}
		x, y, heading := r.IntN(width), r.IntN(width), r.IntN(4)
		for k := range int64(keyframes) {
			along := int(k) % side
			if along == 0 {
				for turn := r.IntN(3) - 1; ; turn = r.IntN(4) {
					h := (heading + turn + 4) % 4
					nx, ny := x+[4]int{1, 0, -1, 0}[h], y+[4]int{0, 1, 0, -1}[h]
					if nx >= 0 && ny >= 0 && nx < width && ny < width {
						heading = h
						break
					}
				}
				here := [2]int{x, y}
				for _, e := range at[here] {
					if e.robot == i && k-e.key > 10 && r.IntN(every/side) == 0 {
						robot.Relatives = append(robot.Relatives, survey.Relative{From: e.key, To: k, Kind: survey.Closure})
						break
					}
				}
				at[here] = append(at[here], stop{i, k})
			}
			pose := lie.Exp(lie.Tangent{5: float64(heading) * math.Pi / 2})
			pose.T = [3]float64{float64(x)*side/2 + 0.5*float64(along)*float64([4]int{1, 0, -1, 0}[heading]), float64(y)*side/2 + 0.5*float64(along)*float64([4]int{0, 1, 0, -1}[heading]), 0}
			truth[i] = append(truth[i], pose)
			if along == side-1 {
				x, y = x+[4]int{1, 0, -1, 0}[heading], y+[4]int{0, 1, 0, -1}[heading]
			}
		}
		closures := robot.Relatives
		robot.Relatives = nil
		own := lie.Identity()
		for k := range truth[i] {
			if k > 0 {
				z := measured(&truth[i][k-1], &truth[i][k], 0.02, 0.002)
				own = own.Mul(adjust.Pose(z))
				robot.Relatives = append(robot.Relatives, survey.Relative{From: int64(k - 1), To: int64(k), Pose: z, Cov: cov})
			}
			robot.Keyframes = append(robot.Keyframes, survey.Keyframe{ID: int64(k), Pose: adjust.Folder(&own)})
		}
		for _, c := range closures {
			c.Pose, c.Cov = measured(&truth[i][c.From], &truth[i][c.To], 0.1, 0.01), wide
			robot.Relatives = append(robot.Relatives, c)
		}
		s.Robots = append(s.Robots, robot)
	}
	var verdicts []survey.ResultVerdict
	for len(s.Ties) < ties {
		met := at[[2]int{r.IntN(width), r.IntN(width)}]
		if len(met) < 2 {
			continue
		}
		a, b := met[r.IntN(len(met))], met[r.IntN(len(met))]
		if a.robot == b.robot {
			continue
		}
		a.key, b.key = min(a.key+int64(r.IntN(6)), int64(keyframes-1)), min(b.key+int64(r.IntN(6)), int64(keyframes-1))
		id := fmt.Sprintf("t%04d", len(s.Ties))
		s.Ties = append(s.Ties, survey.Tie{ID: id, FromRobot: s.Robots[a.robot].ID, FromKey: a.key, ToRobot: s.Robots[b.robot].ID, ToKey: b.key,
			Pose: measured(&truth[a.robot][a.key], &truth[b.robot][b.key], 0.1, 0.01), Cov: wide})
		verdicts = append(verdicts, survey.ResultVerdict{Tie: id, Verdict: "held"})
	}
	return s, verdicts
}

// BenchmarkThirtyRobots audits 30 robots with 100,000 keyframes in space and 5,000 ties.
func BenchmarkThirtyRobots(b *testing.B) {
	s, verdicts := blocks(30, 3334, 5000)
	for b.Loop() {
		phase := ""
		a, err := Run(b.Context(), Input{Survey: s, Verdicts: verdicts, Progress: func(p string) { phase = p }})
		if err != nil {
			b.Fatal(phase, err)
		}
		if !a.Adjustment.Converged() || len(a.Islands) != 1 {
			b.Fatalf("%+v, %d islands", a.Adjustment, len(a.Islands))
		}
	}
}
