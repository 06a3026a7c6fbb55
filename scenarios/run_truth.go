package scenarios

import (
	"math"

	"selvage/agent"
	"selvage/coordinator"
	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"

	"gonum.org/v1/gonum/stat/distuv"
)

// truthIndex finds the true pose of a keyframe.
type truthIndex struct{ pose map[adjust.Key]lie.SE3 }

func newTruthIndex(s *survey.Survey) *truthIndex {
	t := &truthIndex{make(map[adjust.Key]lie.SE3, len(s.Truth))}
	type moment struct {
		robot   string
		session uint32
		stamp   int64
	}
	var byStamp map[moment]int64
	for i := range s.Truth {
		p := &s.Truth[i]
		key := p.Key
		if p.ByStamp {
			if byStamp == nil {
				byStamp = map[moment]int64{}
				for r := range s.Robots {
					for _, k := range s.Robots[r].Keyframes {
						if k.HasStamp {
							byStamp[moment{s.Robots[r].ID, k.Session, k.StampNS}] = k.ID
						}
					}
				}
			}
			var ok bool
			if key, ok = byStamp[moment{p.Robot, p.Session, p.StampNS}]; !ok {
				continue
			}
		}
		t.pose[adjust.Key{Robot: p.Robot, Session: p.Session, ID: key}] = adjust.Pose(p.Pose)
	}
	return t
}

// pair is an estimated and a true position.
type pair struct{ estimate, truth [3]float64 }

// rmse returns the root mean square distance after one rigid motion of all estimates, NaN without any. The motion is the
// least-squares one of Horn, "Closed-form solution of absolute orientation using unit quaternions", JOSA A 4(4), 1987.
func rmse(pairs []pair) float64 {
	if len(pairs) == 0 {
		return math.NaN()
	}
	move := fitPositions(pairs)
	sum := 0.0
	for i := range pairs {
		sum += squaredError(&move, &pairs[i])
	}
	return math.Sqrt(sum / float64(len(pairs)))
}

func squaredError(move *lie.SE3, p *pair) float64 {
	q := move.Apply(p.estimate)
	sum := 0.0
	for k := range q {
		d := q[k] - p.truth[k]
		sum += d * d
	}
	return sum
}

// fitPositions returns the motion that carries the estimates best onto the truth.
func fitPositions(pairs []pair) lie.SE3 {
	var a, b [3]float64
	n := float64(len(pairs))
	for i := range pairs {
		for k := range a {
			a[k] += pairs[i].estimate[k] / n
			b[k] += pairs[i].truth[k] / n
		}
	}
	var m lie.Mat3
	for i := range pairs {
		for r := 0; r < 3; r++ {
			for c := 0; c < 3; c++ {
				m[3*r+c] += (pairs[i].truth[r] - b[r]) * (pairs[i].estimate[c] - a[c])
			}
		}
	}
	rot, _ := lie.NearestRotation(&m)
	p := rot.Apply(a)
	return lie.SE3{R: rot, T: [3]float64{b[0] - p[0], b[1] - p[1], b[2] - p[2]}}
}

// errorOf returns the RMSE of all joined junctions of an epoch, each island moved onto the truth as one.
func (t *truthIndex) errorOf(placed []coordinator.Placed) float64 {
	if len(t.pose) == 0 {
		return math.NaN()
	}
	islands := map[string][]pair{}
	var names []string
	for i := range placed {
		p := &placed[i]
		if !p.Joined {
			continue
		}
		if islands[p.Island] == nil {
			names = append(names, p.Island)
		}
		for k, id := range p.IDs {
			if x, ok := t.pose[adjust.Key{Robot: p.Robot, Session: p.Session, ID: id}]; ok {
				islands[p.Island] = append(islands[p.Island], pair{p.Poses[k].T, x.T})
			}
		}
	}
	sum, n := 0.0, 0
	for _, name := range names {
		e := rmse(islands[name])
		sum += e * e * float64(len(islands[name]))
		n += len(islands[name])
	}
	if n == 0 {
		return math.NaN()
	}
	return math.Sqrt(sum / float64(n))
}

// tieTrue tells for each tie whether it is true, from the true poses of its ends: its misclosure against them stays below what one
// true tie in a million exceeds. It returns nil when the survey has no truth, or none of the moment of an end.
func tieTrue(s *survey.Survey, t *truthIndex) ([]bool, error) {
	if len(t.pose) == 0 {
		return nil, nil
	}
	out := make([]bool, len(s.Ties))
	for i := range s.Ties {
		tie := &s.Ties[i]
		if tie.FromByStamp || tie.ToByStamp {
			return nil, nil
		}
		a, ok := t.pose[adjust.Key{Robot: tie.FromRobot, Session: tie.FromSession, ID: tie.FromKey}]
		b, found := t.pose[adjust.Key{Robot: tie.ToRobot, Session: tie.ToSession, ID: tie.ToKey}]
		if !ok || !found {
			return nil, nil
		}
		square, freedoms, err := misclosure(s, tie, a, b)
		if err != nil {
			return nil, err
		}
		out[i] = square < distuv.ChiSquared{K: float64(freedoms)}.Quantile(1-1e-6)
	}
	return out, nil
}

// misclosure returns r' Omega r of a tie between the poses a and b, and how many numbers it measures.
func misclosure(s *survey.Survey, tie *survey.Tie, a, b lie.SE3) (square float64, freedoms int, err error) {
	event, err := tieEvent(s, tie)
	if err != nil {
		return 0, 0, err
	}
	g := posegraph.New(3*(s.Meta.Dimension-1), []lie.SE3{a, b})
	m := event.(agent.Tie)
	if x := m.Sight; x != nil {
		one := g.AddEncounters(x.Sense)
		one.Add(0, 1, x.Mount, x.Spot, x.Value, &x.Info)
		return one.Chi2(0, &g.Values), one.Freedoms(0), nil
	}
	one := g.AddBetween()
	one.Add(0, 1, m.Z, &m.Info)
	return one.Chi2(0, &g.Values), g.Dim, nil
}
