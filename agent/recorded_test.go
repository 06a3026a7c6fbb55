package agent

import (
	"math"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
	"selvage/msgs"
)

// recording reads run 6 of Leung, Halpern, Barfoot, Liu, "The UTIAS multi-robot cooperative localization and mapping dataset",
// International Journal of Robotics Research 30(8), 969-974, 2011: five robots among fifteen tubes.
func recording(t testing.TB) *survey.Survey {
	dir := os.Getenv("SELVAGE_SHARED")
	if dir == "" {
		dir = filepath.Join("..", "..", "shared")
	}
	dir = filepath.Join(dir, "datasets", "mrclam", "run6")
	if _, err := os.Stat(dir); err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatalf("test data: %v", err)
		}
		t.Skipf("test data: %v", err)
	}
	log, err := survey.ReadSightingLog(dir)
	if err != nil {
		t.Fatal(err)
	}
	o := survey.DefaultSightingLogOptions()
	o.ThinS, o.Robots, o.ToS = 1, false, 600
	s, _, err := log.Survey(o)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// drive feeds what a robot recorded in the order of time; tick is called at every keyframe.
func (r *robot) drive(s *survey.Survey, robot int, tick func()) {
	r.t.Helper()
	in := &s.Robots[robot]
	relatives := map[int64][]survey.Relative{}
	for _, m := range in.Relatives {
		relatives[m.To] = append(relatives[m.To], m)
	}
	sightings := map[int64][]survey.Sighting{}
	for _, m := range in.Sightings {
		sightings[m.Key] = append(sightings[m.Key], m)
	}
	for _, k := range in.Keyframes {
		r.now = k.StampNS
		r.do(Keyframe{Session: k.Session, ID: k.ID, StampNS: k.StampNS, Pose: adjust.Pose(k.Pose)})
		for _, m := range relatives[k.ID] {
			info, err := m.Cov.Information(2)
			if err != nil {
				r.t.Fatal(err)
			}
			r.do(Relative{Session: m.Session, From: m.From, To: m.To, Z: adjust.Pose(m.Pose), Info: info})
		}
		for _, m := range sightings[k.ID] {
			info, err := m.Sight.Information(2)
			if err != nil {
				r.t.Fatal(err)
			}
			mount := lie.Identity()
			for _, x := range s.Meta.Robots[robot].Mounting {
				if x.Name == m.Sight.Sensor {
					mount = adjust.Pose(survey.Pose{T: [3]float64{x.X, x.Y, x.Z}, Q: [4]float64{x.QX, x.QY, x.QZ, x.QW}})
				}
			}
			r.do(Sighting{Session: m.Session, ID: m.Key, Mark: m.Mark, Sight: Sight{Sense: fleetSenses[m.Kind], Value: m.Sight.Value, Info: info, Mount: mount}})
		}
		tick()
	}
}

// offTruth aligns poses to the truth and returns the root mean square of the distances.
func offTruth(s *survey.Survey, robot string, at func(id int64) lie.SE3) float64 {
	var est, truth [][3]float64
	for _, k := range s.Truth {
		if k.Robot == robot {
			est, truth = append(est, at(k.Key).T), append(truth, k.Pose.T)
		}
	}
	for i := range truth {
		truth[i][2] = 0
	}
	move, _ := lie.FitPoints(false, est, truth, nil)
	sum := 0.0
	for i := range est {
		p := move.Apply(est[i])
		sum += (p[0]-truth[i][0])*(p[0]-truth[i][0]) + (p[1]-truth[i][1])*(p[1]-truth[i][1])
	}
	return math.Sqrt(sum / float64(len(est)))
}

// TestRecordedRobots: from dead reckoning, whether the map grows with the drive or all comes at once, each robot reaches the map of the
// one-piece adjustment of what it recorded, as good against the motion capture and but for a few sightings the same.
func TestRecordedRobots(t *testing.T) {
	s := recording(t)
	for i := range s.Robots {
		part := *s
		part.Robots = []survey.Robot{s.Robots[i]}
		part.Meta.Robots = s.Meta.Robots[i : i+1]
		p, err := adjust.New(&part, nil)
		if err != nil {
			t.Fatal(err)
		}
		for k := range part.Marks {
			part.Marks[k].Role = survey.CheckPoint
		}
		if err := p.Begin(adjust.Auto); err != nil {
			t.Fatal(err)
		}
		if err := p.Analyse(1); err != nil {
			t.Fatal(err)
		}
		whole := p.SolveRobust(posegraph.DefaultOptions(), nil)
		id := s.Robots[i].ID
		reference := offTruth(s, id, func(k int64) lie.SE3 {
			return p.Graph.Values.Poses[p.Var[adjust.Key{Robot: id, Session: s.Robots[i].Keyframes[0].Session, ID: k}]]
		})
		for _, grown := range []bool{true, false} {
			r := newRobot(t, 2)
			r.drive(&part, 0, func() {
				if grown {
					r.do(Tick{})
				}
			})
			r.now += 60 * second
			r.do(Tick{})
			track := r.Tracks()[0]
			held, refused, open := 0, 0, 0
			for _, e := range r.Sightings() {
				switch e.Verdict {
				case msgs.Held:
					held++
				case msgs.Refused:
					refused++
				default:
					open++
				}
			}
			off := offTruth(s, id, func(k int64) lie.SE3 { return track.Poses[slices.Index(track.IDs, k)] })
			t.Logf("robot %s, grown %v: %d keyframes, %d marks, %d sightings held, %d refused, rms %.3f m, F %.1f; one piece: %d refused, rms %.3f m, F %.1f", id, grown,
				len(track.IDs), len(track.Marks), held, refused, off, r.sessions[0].graph.Cost(), whole.Refused, reference, whole.Cost)
			if math.Abs(off-reference) > 0.01 || open > 0 || held+refused != len(whole.Findings) || math.Abs(float64(refused-whole.Refused)) > 0.01*float64(held) {
				t.Errorf("robot %s, grown %v: rms %g m, %d held, %d refused, %d open; one piece: rms %g m, %d refused of %d", id, grown, off, held, refused, open, reference, whole.Refused, len(whole.Findings))
			}
		}
	}
}
