package adjust

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// yard is a made survey: robots that drive loops among marks, each in a frame of its own, and see marks and each other by all kinds
// of sighting, some of them wrong.
type yard struct {
	survey survey.Survey
	truth  map[Key]lie.SE3
	marks  map[string][3]float64
}

type yardPlan struct {
	dimension, robots, keyframes, marks, controls int
	shared                                        bool // marks are known to be the same for all robots
	encounters                                    int
	wrong                                         float64
	stamps                                        bool // name moments between keyframes
}

func newYard(seed uint64, c yardPlan) *yard {
	r := rand.New(rand.NewPCG(seed, 77))
	y := &yard{truth: map[Key]lie.SE3{}, marks: map[string][3]float64{}}
	s := &y.survey
	s.Meta.Dimension = c.dimension
	space := c.dimension == 3
	noise := func(m, rad float64) (t lie.Tangent) {
		for i := range t {
			t[i] = m * r.NormFloat64()
			if i > 2 {
				t[i] = rad * r.NormFloat64()
			}
		}
		if !space {
			t[2], t[3], t[4] = 0, 0, 0
		}
		return t
	}
	height := func(h float64) float64 {
		if space {
			return h
		}
		return 0
	}
	var places [][3]float64
	for k := range c.marks {
		places = append(places, [3]float64{30 * r.Float64(), 30 * r.Float64(), height(6 * r.Float64())})
		m := survey.Mark{Name: fmt.Sprint("m", k)}
		if k < c.controls {
			m.Role, m.T, m.Sigma = survey.ControlPoint, places[k], [3]float64{0.01, 0.01, 0.01}
			if !space {
				m.Sigma[2] = math.Inf(1)
			}
		}
		if c.shared {
			s.Marks = append(s.Marks, m)
			y.marks[m.Name] = places[k]
		}
	}
	sensor := lie.Exp(lie.Tangent{0: 0.3, 1: 0.1, 5: 0.4})
	target := [3]float64{-0.2, 0.1, height(0.5)}
	var path [][]lie.SE3
	for i := range c.robots {
		id := fmt.Sprint("r", i)
		s.Meta.Robots = append(s.Meta.Robots, survey.RobotMeta{ID: id, Sessions: []uint32{0}, Mounting: []survey.Mount{
			{Name: "eye", Kind: "sensor", X: sensor.T[0], Y: sensor.T[1], QZ: math.Sin(0.2), QW: math.Cos(0.2)},
			{Name: "tag", Kind: "target", X: target[0], Y: target[1], Z: target[2], QW: 1},
		}})
		sensor = lie.FromQuat(sensor.T, lie.Quat{0, 0, math.Sin(0.2), math.Cos(0.2)})
		x := lie.Exp(lie.Tangent{5: 6 * r.Float64()}) // a circle of 8 m around a place near the middle
		x.T = [3]float64{12 + 6*r.Float64() - 8*x.R[1], 12 + 6*r.Float64() - 8*x.R[4], height(r.Float64())}
		robot := survey.Robot{ID: id}
		own := lie.Identity()
		var at []lie.SE3
		for k := range c.keyframes {
			if k > 0 {
				step := lie.Exp(lie.Tangent{0: 0.8, 2: height(0.1 * math.Sin(float64(k)/5)), 5: 0.1 + 0.05*math.Sin(float64(k)/9+float64(i))})
				x = x.Mul(step)
				z := step.Plus(noise(0.02, 0.005))
				own = own.Mul(z)
				robot.Relatives = append(robot.Relatives, survey.Relative{From: int64(k - 1), To: int64(k), Pose: Folder(&z), Cov: survey.Uncorrelated(0.02, 0.005)})
			}
			at = append(at, x)
			y.truth[Key{Robot: id, ID: int64(k)}] = x
			robot.Keyframes = append(robot.Keyframes, survey.Keyframe{ID: int64(k), StampNS: int64(k) * 1e9, HasStamp: true, Pose: Folder(&own)})
		}
		path = append(path, at)
		s.Robots = append(s.Robots, robot)
	}
	kinds := []survey.Kind{survey.RangeBearing, survey.Position, survey.RangeBearing, survey.Bearing, survey.Range}
	sight := func(kind survey.Kind, x lie.SE3, p [3]float64) survey.Sight {
		q := x.Mul(sensor).Inv().Apply(p)
		flat := math.Hypot(q[0], q[1])
		e := survey.Sight{Sensor: "eye", Sigma: survey.Unmeasured}
		value := [3]float64{math.Hypot(flat, q[2]), math.Atan2(q[1], q[0]), math.Atan2(q[2], flat)}
		sigma := [3]float64{0.05, 0.01, 0.01}
		if kind == survey.Position {
			value, sigma = q, [3]float64{0.05, 0.05, 0.05}
		}
		wrong := r.Float64() < c.wrong
		for i := range 3 {
			if i == 2 && !space || kind == survey.Range && i > 0 || kind == survey.Bearing && i == 0 {
				continue
			}
			e.Sigma[i], e.Value[i] = sigma[i], value[i]+sigma[i]*r.NormFloat64()
			if wrong {
				e.Value[i] += 60 * sigma[i]
			}
		}
		return e
	}
	moment := func(i, k int) (lie.SE3, int64) { // somewhere after keyframe k
		share := 0.1 + 0.8*r.Float64()
		d := path[i][k].Between(path[i][k+1])
		t := d.Log()
		for j := range t {
			t[j] *= share
		}
		return path[i][k].Plus(t), int64((float64(k) + share) * 1e9)
	}
	for i := range c.robots {
		id := fmt.Sprint("r", i)
		for k := 0; k < c.keyframes-1; k++ {
			for n, p := range places {
				if d := path[i][k].Inv().Apply(p); math.Hypot(d[0], d[1]) > 12 || r.Float64() < 0.5 {
					continue
				}
				name := fmt.Sprint("m", n)
				if !c.shared {
					name = fmt.Sprint(id, "-", n)
					if _, known := y.marks[name]; !known {
						y.marks[name] = p
						s.Marks = append(s.Marks, survey.Mark{Name: name})
					}
				}
				kind := kinds[r.IntN(len(kinds))]
				e := survey.Sighting{Key: int64(k), Mark: name, Kind: kind, Sight: sight(kind, path[i][k], p)}
				if c.stamps && k%3 == 0 {
					x, at := moment(i, k)
					e.Key, e.StampNS, e.ByStamp, e.Sight = 0, at, true, sight(kind, x, p)
				}
				s.Robots[i].Sightings = append(s.Robots[i].Sightings, e)
			}
		}
	}
	for k := range c.encounters {
		i, j := k%c.robots, (k+1+r.IntN(c.robots-1))%c.robots
		a, b := r.IntN(c.keyframes-1), r.IntN(c.keyframes-1)
		kind := kinds[r.IntN(len(kinds))]
		t := survey.Tie{ID: fmt.Sprint("t", k), FromRobot: fmt.Sprint("r", i), FromKey: int64(a), ToRobot: fmt.Sprint("r", j), ToKey: int64(b), Kind: kind}
		from, to := path[i][a], path[j][b]
		if c.stamps && k%2 == 0 {
			from, t.FromStampNS = moment(i, a)
			to, t.ToStampNS = moment(j, b)
			t.FromKey, t.ToKey, t.FromByStamp, t.ToByStamp = 0, 0, true, true
		}
		t.Sight = sight(kind, from, to.Apply(target))
		t.Sight.Target = "tag"
		s.Ties = append(s.Ties, t)
	}
	return y
}

// worst returns the largest distance of a keyframe from its true place, after aligning all with one motion unless the datum is held.
func (y *yard) worst(p *Problem, aligned bool) float64 {
	var est, truth [][3]float64
	for v, k := range p.Keys {
		if x, ok := y.truth[k]; ok {
			est, truth = append(est, p.Graph.Values.Poses[v].T), append(truth, x.T)
		}
	}
	move := lie.Identity()
	if aligned {
		move, _ = lie.FitPoints(p.Graph.Dim == 3, est, truth, nil)
	}
	worst := 0.0
	for i := range est {
		q := move.Apply(est[i])
		worst = math.Max(worst, math.Hypot(math.Hypot(q[0]-truth[i][0], q[1]-truth[i][1]), q[2]-truth[i][2]))
	}
	return worst
}

// consistency returns e' C^-1 e of the keyframes, mean and largest, e the error in the datum and C its covariance.
func (y *yard) consistency(t *testing.T, p *Problem) (mean, most float64) {
	sigma, err := p.Solver().Covariance()
	if err != nil {
		t.Fatal(err)
	}
	d, n := p.Graph.Dim, 0
	for v, k := range p.Keys {
		x, ok := y.truth[k]
		if !ok {
			continue
		}
		between := p.Graph.Values.Poses[v].Between(x)
		e := between.Log()
		r := e[:]
		if d == 3 {
			r = []float64{e[0], e[1], e[5]}
		}
		var solution mat.VecDense
		if err := solution.SolveVec(mat.NewDense(d, d, append([]float64(nil), sigma.Of(int32(v))...)), mat.NewVecDense(d, r)); err != nil {
			t.Fatal(err)
		}
		q := mat.Dot(mat.NewVecDense(d, r), &solution)
		mean, most, n = mean+q, math.Max(most, q), n+1
	}
	return mean / float64(n), most
}

// Fleets whose frames nothing tells are joined by what they have seen, wrong sightings left out, in the plane and in space.
func TestYards(t *testing.T) {
	for _, c := range []struct {
		name string
		plan yardPlan
		most float64
	}{
		{"private marks and encounters", yardPlan{robots: 3, keyframes: 60, marks: 12, encounters: 60, wrong: 0.05, stamps: true}, 0.3},
		{"shared marks alone", yardPlan{robots: 3, keyframes: 60, marks: 12, shared: true, wrong: 0.05}, 0.3},
		{"shared marks, control points", yardPlan{robots: 3, keyframes: 60, marks: 12, controls: 4, shared: true, wrong: 0.05, stamps: true}, 0.5},
		{"encounters alone", yardPlan{robots: 2, keyframes: 60, encounters: 80, wrong: 0.05}, 0.5},
	} {
		for dimension := 2; dimension <= 3; dimension++ {
			for seed := range uint64(5) {
				c.plan.dimension = dimension
				y := newYard(seed, c.plan)
				p, err := New(&y.survey, nil)
				if err != nil {
					t.Fatal(err)
				}
				if err := p.Begin(Auto); err != nil {
					t.Fatal(err)
				}
				if p.Islands != 1 {
					t.Errorf("%s, dimension %d, seed %d: %d islands", c.name, dimension, seed, p.Islands)
					continue
				}
				held := c.plan.controls > 0
				if front := Pose(y.survey.Robots[0].Keyframes[0].Pose); !held && p.Graph.Values.Poses[p.Anchors[0]] != front {
					t.Errorf("%s, dimension %d, seed %d: the fixed keyframe has left its place", c.name, dimension, seed)
				}
				if got := len(p.Anchors); held != (got == 0) {
					t.Errorf("%s: %d fixed poses with %d control points", c.name, got, c.plan.controls)
				}
				if err := p.Analyse(1); err != nil {
					t.Fatal(err)
				}
				res := p.SolveRobust(posegraph.DefaultOptions(), nil)
				worst := y.worst(p, !held)
				if held {
					if mean, most := y.consistency(t, p); mean > 2*float64(p.Graph.Dim) || most > 40 {
						t.Errorf("%s, dimension %d, seed %d: errors are %.2f of their variance, at most %.1f", c.name, dimension, seed, mean/float64(p.Graph.Dim), most)
					}
				}
				if res.Stop != posegraph.Converged || worst > c.most {
					t.Errorf("%s, dimension %d, seed %d: off by up to %.3f m, %v after %d, cost %.0f, %d of %d cut", c.name, dimension, seed, worst, res.Stop, res.Iterations, res.Cost, res.Refused, len(p.sights))
				}
			}
		}
	}
}

// What cannot be joined stays an island, and its sightings of others are left out.
func TestYardThatFallsApart(t *testing.T) {
	y := newYard(1, yardPlan{dimension: 2, robots: 3, keyframes: 40, marks: 10, encounters: 0})
	y.survey.Ties = []survey.Tie{{ID: "lone", FromRobot: "r0", FromKey: 3, ToRobot: "r2", ToKey: 4, Kind: survey.Range,
		Sight: survey.Sight{Value: [3]float64{5}, Sigma: [3]float64{0.1, math.Inf(1), math.Inf(1)}}}}
	p, err := New(&y.survey, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(Auto); err != nil {
		t.Fatal(err)
	}
	if p.Islands != 3 || len(p.Anchors) != 3 {
		t.Errorf("%d islands, %d fixed poses; want 3", p.Islands, len(p.Anchors))
	}
	if e := p.Sights()[0]; e.Tie != 0 || e.Set != nil {
		t.Errorf("the lone range is in the graph: %+v", e)
	}
	if err := p.Analyse(1); err != nil {
		t.Fatal(err)
	}
	if res := p.SolveRobust(posegraph.DefaultOptions(), nil); res.Stop != posegraph.Converged {
		t.Errorf("%v, %s", res.Stop, p.Describe(max(0, res.Weakest)))
	}
}

// What names something that is not there is refused with its place.
func TestSightingsThatNameNothing(t *testing.T) {
	for _, c := range []struct {
		spoil func(s *survey.Survey)
		want  string
	}{
		{func(s *survey.Survey) { s.Robots[1].Sightings[0].Mark = "nowhere" }, "robot r1, session 0, sighting 1 of mark nowhere: no such mark"},
		{func(s *survey.Survey) { s.Robots[0].Sightings[2].Key = 999 }, "no keyframe 999 of robot r0"},
		{func(s *survey.Survey) { s.Robots[0].Sightings[2].Sight.Sensor = "nose" }, `robot r0 has no mounting "nose"`},
		{func(s *survey.Survey) { s.Ties[1].Sight.Target = "tail" }, "tie t1: robot r"},
	} {
		y := newYard(1, yardPlan{dimension: 2, robots: 2, keyframes: 20, marks: 10, encounters: 3})
		c.spoil(&y.survey)
		if _, err := New(&y.survey, nil); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("error %v, want one that says %q", err, c.want)
		}
	}
}
