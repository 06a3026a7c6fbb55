package adjust

import (
	"encoding/csv"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// net reads one case of testdata/two_robot_net.csv: the survey, the adjusted poses and their standard deviations, and T.
func net(t *testing.T, name string) (s *survey.Survey, poses, sigmas map[Key][3]float64, total float64) {
	f, err := os.Open("testdata/two_robot_net.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	s = &survey.Survey{Meta: survey.Meta{Dimension: 2}, Robots: []survey.Robot{{ID: "a"}, {ID: "b"}}}
	poses, sigmas = map[Key][3]float64{}, map[Key][3]float64{}
	for _, row := range rows {
		number := func(c int) float64 {
			x, err := strconv.ParseFloat(row[c], 64)
			if err != nil {
				t.Fatal(err)
			}
			return x
		}
		if row[0] != name {
			continue
		}
		if row[1] == "global" {
			total = number(4)
			continue
		}
		key := func(c int) Key { return Key{Robot: row[c][:1], ID: int64(row[c][1] - '0')} }
		value, sigma := [3]float64{number(4), number(5), number(6)}, [3]float64{number(7), number(8), number(9)}
		i := key(2)
		robot := &s.Robots[i.Robot[0]-'a']
		if row[1] == "pose" {
			poses[i], sigmas[i] = value, sigma
			robot.Keyframes = append(robot.Keyframes, survey.Keyframe{ID: i.ID, StampNS: 1000 + i.ID, HasStamp: true, Pose: survey.Identity()})
			continue
		}
		x := lie.SE2{X: value[0], Y: value[1], C: math.Cos(value[2]), S: math.Sin(value[2])}.Spatial()
		cov := survey.Uncorrelated(sigma[0], sigma[2])
		if j := key(3); i.Robot == j.Robot {
			robot.Relatives = append(robot.Relatives, survey.Relative{From: i.ID, To: j.ID, Pose: Folder(&x), Cov: cov})
		} else {
			s.Ties = append(s.Ties, survey.Tie{ID: row[2] + row[3], FromRobot: i.Robot, FromKey: i.ID, ToRobot: j.Robot, ToKey: j.ID, Pose: Folder(&x), Cov: cov})
		}
	}
	if len(poses) != 8 || len(s.Ties) != 3 {
		t.Fatalf("%d poses, %d ties in %s", len(poses), len(s.Ties), name)
	}
	return s, poses, sigmas, total
}

func adjusted(t *testing.T, s *survey.Survey, held func(int) bool, start Start, workers int) (*Problem, posegraph.Result) {
	t.Helper()
	p, err := New(s, held)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(start); err != nil {
		t.Fatal(err)
	}
	if err := p.Analyse(workers); err != nil {
		t.Fatal(err)
	}
	return p, p.Solve(posegraph.DefaultOptions())
}

// Adjusted poses, standard deviations and T of the worked example, to the digits given, from every start and with either number of
// workers.
func TestTwoRobotNet(t *testing.T) {
	for _, name := range []string{"consistent", "one_false_link_a2_b2"} {
		for _, start := range []Start{Auto, Chordal, Tree, Given} {
			for workers := 1; workers <= 2; workers++ {
				s, poses, sigmas, total := net(t, name)
				if start == Given {
					for i := range s.Robots {
						for k := range s.Robots[i].Keyframes {
							f := &s.Robots[i].Keyframes[k]
							w := poses[Key{Robot: s.Robots[i].ID, ID: f.ID}]
							f.Pose = survey.Pose{T: [3]float64{w[0], w[1], 0}, Q: [4]float64{2: math.Sin(w[2] / 2), 3: math.Cos(w[2] / 2)}}
						}
					}
				}
				p, r := adjusted(t, s, nil, start, workers)
				if r.Stop != posegraph.Converged {
					t.Errorf("%s, %s: stopped: %v", name, start, r.Stop)
				}
				if math.Abs(2*r.Cost-total) > 5e-10*max(total, 1)*10 {
					t.Errorf("%s, %s: T = %.10g, want %.10g", name, start, 2*r.Cost, total)
				}
				sigma, err := p.Solver().Covariance()
				if err != nil {
					t.Fatal(err)
				}
				for v, key := range p.Keys {
					x := lie.Planar(&p.Graph.Values.Poses[v])
					w := poses[key]
					turn := math.Remainder(math.Atan2(x.S, x.C)-w[2], 2*math.Pi)
					if math.Abs(x.X-w[0]) > 2e-8 || math.Abs(x.Y-w[1]) > 2e-8 || math.Abs(turn) > 2e-8 {
						t.Errorf("%s, %s: pose %v is %v, want %v", name, start, key, x, w)
					}
					if v == int(p.Anchors[0]) {
						continue
					}
					c := sigma.Of(int32(v))
					// In the datum: the tangent's x and y turned by the pose.
					sx := math.Sqrt(x.C*x.C*c[0] - 2*x.C*x.S*c[1] + x.S*x.S*c[4])
					sy := math.Sqrt(x.S*x.S*c[0] + 2*x.C*x.S*c[1] + x.C*x.C*c[4])
					for k, got := range [3]float64{sx, sy, math.Sqrt(c[8])} {
						if want := sigmas[key][k]; math.Abs(got-want) > 2e-5*want {
							t.Errorf("%s, %s: sigma %d of %v is %.8g, want %.6g", name, start, k, key, got, want)
						}
					}
				}
			}
		}
	}
}

// Without its false link the second case has the same residuals as the first without that link: held chooses the ties.
func TestHeldChoosesTheTies(t *testing.T) {
	var costs []float64
	for _, name := range []string{"consistent", "one_false_link_a2_b2"} {
		s, _, _, _ := net(t, name)
		p, r := adjusted(t, s, func(k int) bool { return s.Ties[k].ID != "a2b2" }, Auto, 1)
		costs = append(costs, r.Cost)
		for k, tie := range s.Ties {
			if got := p.Tie[k] >= 0; got != (tie.ID != "a2b2") {
				t.Errorf("%s: tie %s in the adjustment: %v", name, tie.ID, got)
			}
			if f := p.Tie[k]; f >= 0 {
				i, j := p.Keys[p.Factors.I[f]], p.Keys[p.Factors.J[f]]
				if i != (Key{tie.FromRobot, tie.FromSession, tie.FromKey}) || j != (Key{tie.ToRobot, tie.ToSession, tie.ToKey}) {
					t.Errorf("%s: tie %s joins %v and %v", name, tie.ID, i, j)
				}
			}
		}
		if p.Factors.Len() != 8 {
			t.Errorf("%s: %d factors, want 8", name, p.Factors.Len())
		}
	}
	if math.Abs(costs[0]-costs[1]) > 1e-10 || costs[0] == 0 {
		t.Errorf("costs without the false link: %v", costs)
	}
}

// A tie to a moment goes to the keyframe with that stamp.
func TestTieByStamp(t *testing.T) {
	s, _, _, _ := net(t, "consistent")
	_, want := adjusted(t, s, nil, Auto, 1)
	for k := range s.Ties {
		tie := &s.Ties[k]
		tie.ToByStamp, tie.ToStampNS, tie.ToKey = true, 1000+tie.ToKey, -1
	}
	if _, got := adjusted(t, s, nil, Auto, 1); got != want {
		t.Errorf("%+v, by key %+v", got, want)
	}
}

// A tie to a moment between two keyframes makes one there, on the geodesic of the odometry between them; later ties find it, or the
// shorter stretch beside it.
func TestTieBetweenKeyframes(t *testing.T) {
	s, _, _, _ := net(t, "consistent")
	b := &s.Robots[1]
	for k := range b.Keyframes {
		b.Keyframes[k].StampNS = 100 * b.Keyframes[k].ID
	}
	for k, stamp := range []int64{125, 150, 125} {
		s.Ties[k].ToByStamp, s.Ties[k].ToStampNS = true, stamp
	}
	p, r := adjusted(t, s, func(k int) bool { return k == 0 }, Auto, 1)
	if r.Stop != posegraph.Converged || r.Cost > 1e-20 {
		t.Errorf("%+v: one tie costs nothing", r)
	}
	z := Pose(b.Relatives[1].Pose)
	part := z.Log()
	for i := range part {
		part[i] /= 4
	}
	at := func(p *Problem, id int64) lie.SE3 {
		v, ok := p.Var[Key{Robot: "b", ID: id}]
		if !ok {
			t.Fatalf("no keyframe %d of b", id)
		}
		return p.Graph.Values.Poses[v]
	}
	off := lie.Exp(part).Between(at(p, 1).Between(at(p, -125)))
	for _, x := range off.Log() {
		if math.Abs(x) > 1e-9 {
			t.Errorf("the keyframe made lies off the geodesic by %v", off.Log())
		}
	}
	p, r = adjusted(t, s, nil, Auto, 1)
	if r.Stop != posegraph.Converged || len(p.Keys) != 10 || p.Factors.Len() != 11 {
		t.Errorf("%v, %d keyframes, %d factors; want 10 and 11", r.Stop, len(p.Keys), p.Factors.Len())
	}
	if first, last := p.Factors.J[p.Tie[0]], p.Factors.J[p.Tie[2]]; first != last || p.Keys[first].ID != -125 {
		t.Errorf("ties to one moment end at %v and %v", p.Keys[first], p.Keys[last])
	}
}

// Without ties every session is an island of its own and keeps its first keyframe where the front end had it.
func TestIslands(t *testing.T) {
	s, _, _, _ := net(t, "consistent")
	first := survey.Pose{T: [3]float64{7, -3, 0}, Q: [4]float64{2: 0.6, 3: 0.8}}
	s.Robots[1].Keyframes[0].Pose = first
	p, r := adjusted(t, s, func(int) bool { return false }, Auto, 1)
	if r.Stop != posegraph.Converged || r.Cost > 1e-20 {
		t.Errorf("%+v: chains alone cost nothing", r)
	}
	if !slices.Equal(p.Anchors, []int32{0, 4}) || !slices.Equal(p.Island, []int32{0, 0, 0, 0, 1, 1, 1, 1}) {
		t.Errorf("anchors %v, islands %v", p.Anchors, p.Island)
	}
	if got := Folder(&p.Graph.Values.Poses[4]); got != Folder(&[]lie.SE3{Pose(first)}[0]) {
		t.Errorf("the first keyframe of b moved to %v", got)
	}
	joined, _ := adjusted(t, s, nil, Auto, 1)
	if !slices.Equal(joined.Anchors, []int32{0}) {
		t.Errorf("anchors with ties: %v", joined.Anchors)
	}
}

func TestErrorsNameThePlace(t *testing.T) {
	for name, c := range map[string]struct {
		change func(s *survey.Survey)
		want   []string
	}{
		"sigma of a relative pose": {func(s *survey.Survey) { s.Robots[1].Relatives[1].Cov.Sigma[0] = -1 }, []string{"robot b", "session 0", "1 to 2", "sigma of x"}},
		"sigma of a tie":           {func(s *survey.Survey) { s.Ties[1].Cov.Sigma[5] = 0 }, []string{"tie a2b2", "sigma of rz"}},
		"far keyframe":             {func(s *survey.Survey) { s.Ties[0].ToKey = 99 }, []string{"tie a3b1", "keyframe 99 of robot b"}},
		"near keyframe":            {func(s *survey.Survey) { s.Ties[0].FromKey = 98 }, []string{"tie a3b1", "keyframe 98 of robot a"}},
		"far robot":                {func(s *survey.Survey) { s.Ties[0].ToRobot = "c" }, []string{"tie a3b1", "robot c"}},
		"far session":              {func(s *survey.Survey) { s.Ties[0].ToSession = 4 }, []string{"tie a3b1", "robot b, session 4"}},
		"moment":                   {func(s *survey.Survey) { s.Ties[0].ToByStamp, s.Ties[0].ToStampNS = true, 5 }, []string{"tie a3b1", "robot b", "the stamp 5"}},
		"tie to itself":            {func(s *survey.Survey) { s.Ties[0].ToRobot, s.Ties[0].ToKey = "a", s.Ties[0].FromKey }, []string{"tie a3b1", "both ends"}},
		"measured from nowhere":    {func(s *survey.Survey) { s.Robots[0].Relatives[1].From = 77 }, []string{"robot a", "77 to 2", "no keyframe 77"}},
		"measured to nowhere":      {func(s *survey.Survey) { s.Robots[0].Relatives[1].To = -5 }, []string{"robot a", "no keyframe -5"}},
		"measured to itself":       {func(s *survey.Survey) { s.Robots[0].Relatives[1].To = 1 }, []string{"robot a", "1 to 1", "both ends"}},
	} {
		s, _, _, _ := net(t, "consistent")
		c.change(s)
		_, err := New(s, nil)
		if err == nil {
			t.Errorf("%s: no error", name)
			continue
		}
		for _, w := range c.want {
			if !strings.Contains(err.Error(), w) {
				t.Errorf("%s: %q does not name %q", name, err, w)
			}
		}
	}
	s, _, _, _ := net(t, "consistent")
	p, err := New(s, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin("middle"); err == nil || !strings.Contains(err.Error(), `"middle"`) {
		t.Errorf("start: %v", err)
	}
}

// Where the chordal start is not determined, auto chains from the poses of the survey; what is free is then found by the solver.
func TestAutoFallsBackToTheTree(t *testing.T) {
	s, _, _, _ := net(t, "consistent")
	for k := range s.Robots[0].Relatives {
		s.Robots[0].Relatives[k].Cov.Sigma[0], s.Robots[0].Relatives[k].Cov.Sigma[1] = math.Inf(1), math.Inf(1)
	}
	held := func(int) bool { return false }
	p, err := New(s, held)
	if err != nil {
		t.Fatal(err)
	}
	if p.Begin(Chordal) == nil {
		t.Fatal("chordal: positions that nobody measured are no error")
	}
	p, r := adjusted(t, s, held, Auto, 1)
	if r.Stop != posegraph.Undetermined || r.Weakest < 1 || r.Weakest > 3 {
		t.Errorf("%+v, want undetermined and one of 1 to 3", r)
	}
	if x := p.Graph.Values.Poses[3]; x.T == [3]float64{} {
		t.Error("the tree placed nothing")
	}
}
