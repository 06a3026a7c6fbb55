package scenarios

import (
	"fmt"
	"math"

	"selvage/agent"
	"selvage/coordinator"
	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/survey"
	"selvage/msgs"
)

// place is one session of one robot in the final map.
type place struct {
	agent.Track
	robot  int
	number int // of its island: 0 is the map's datum, from 1 on the others, sessions that share nothing each one of their own
}

// at returns the pose of keyframe k in the datum of its island.
func (p *place) at(k int, dim int) lie.SE3 {
	x := p.DatumFromSession.Mul(p.Poses[k])
	if dim == 2 {
		x = lie.Planar(&x).Spatial()
	}
	return x
}

// places returns every session, robot by robot. The map's datum is that of the island with the most robots, among these the one
// with the most keyframes, the first of equal ones.
func (r *Run) places() []place {
	var out []place
	type size struct{ sessions, robots, keyframes, lastRobot int }
	sizes := map[string]*size{}
	for i, tracks := range r.tracks() {
		for _, t := range tracks {
			out = append(out, place{Track: t, robot: i})
			if !t.Joined {
				continue
			}
			s := sizes[t.Island]
			if s == nil {
				s = &size{lastRobot: -1}
				sizes[t.Island] = s
			}
			s.sessions++
			s.keyframes += len(t.IDs)
			if s.lastRobot != i {
				s.robots++
				s.lastRobot = i
			}
		}
	}
	shared := func(p *place) *size {
		if s := sizes[p.Island]; p.Joined && s.sessions > 1 {
			return s
		}
		return nil
	}
	var best *size
	for i := range out {
		if s := shared(&out[i]); s != nil && (best == nil || s.robots > best.robots || s.robots == best.robots && s.keyframes > best.keyframes) {
			best = s
		}
	}
	next := 1
	numbers := map[string]int{}
	for i := range out {
		p := &out[i]
		switch s := shared(p); {
		case s == nil:
			p.number = next
			next++
		case s != best:
			if numbers[p.Island] == 0 {
				numbers[p.Island] = next
				next++
			}
			p.number = numbers[p.Island]
		}
	}
	return out
}

// commonMap tells whether the datum joins two robots, or sessions of the only one.
func commonMap(places []place, robots int) bool {
	first := -1
	for i := range places {
		switch p := &places[i]; {
		case p.number != 0:
		case first >= 0 && p.robot != first:
			return true
		default:
			first = p.robot
		}
	}
	return first >= 0 && robots == 1
}

// members counts the sessions of each island.
func members(places []place) map[int]int {
	out := map[int]int{}
	for i := range places {
		out[places[i].number]++
	}
	return out
}

// motions returns for each island the motion that carries its positions best onto the truth; islands without truth have none.
func motions(places []place, t *truthIndex, robots []survey.Robot) map[int]lie.SE3 {
	pairs := map[int][]pair{}
	for i := range places {
		p := &places[i]
		pairs[p.number] = append(pairs[p.number], t.pairsOf(p, robots[p.robot].ID)...)
	}
	out := map[int]lie.SE3{}
	for number, list := range pairs {
		if len(list) > 0 {
			out[number] = fitPositions(list)
		}
	}
	return out
}

// pairsOf returns the estimated and true positions of a session, as far as the truth is known.
func (t *truthIndex) pairsOf(p *place, robot string) []pair {
	var out []pair
	for k, id := range p.IDs {
		if x, ok := t.pose[adjust.Key{Robot: robot, Session: p.Session, ID: id}]; ok {
			out = append(out, pair{p.DatumFromSession.Apply(p.Poses[k].T), x.T})
		}
	}
	return out
}

// errorsInTeam returns the RMSE of each robot's positions in the fleet's map, one motion for each island.
func (r *Run) errorsInTeam(places []place, t *truthIndex) []*float64 {
	robots := r.Outing.Survey.Robots
	out := make([]*float64, len(robots))
	move, size := motions(places, t, robots), members(places)
	sum, count := make([]float64, len(robots)), make([]int, len(robots))
	for i := range places {
		p := &places[i]
		m, ok := move[p.number]
		if !ok || size[p.number] < 2 {
			continue
		}
		for _, x := range t.pairsOf(p, robots[p.robot].ID) {
			sum[p.robot] += squaredError(&m, &x)
			count[p.robot]++
		}
	}
	for i := range out {
		if count[i] > 0 {
			out[i] = figure(math.Sqrt(sum[i] / float64(count[i])))
		}
	}
	return out
}

// errorsAlone returns the RMSE of each robot's positions when it adjusts its own measurements without any tie, each connected part
// moved onto the truth by itself.
func (r *Run) errorsAlone(t *truthIndex) ([]*float64, error) {
	known := r.known()
	out := make([]*float64, len(known.Robots))
	if len(t.pose) == 0 {
		return out, nil
	}
	for i := range known.Robots {
		if len(known.Robots[i].Keyframes) == 0 {
			continue
		}
		p, err := adjust.New(&survey.Survey{Meta: known.Meta, Robots: known.Robots[i : i+1], Marks: known.Marks}, nil)
		if err != nil {
			return nil, err
		}
		if err := p.Begin(adjust.Auto); err != nil {
			return nil, fmt.Errorf("robot %s alone: %w", known.Robots[i].ID, err)
		}
		if err := p.Analyse(1); err != nil {
			return nil, fmt.Errorf("robot %s alone: %w", known.Robots[i].ID, err)
		}
		p.Solve(tight())
		parts := make([][]pair, p.Islands)
		for v, key := range p.Keys {
			if x, ok := t.pose[key]; ok {
				parts[p.Island[v]] = append(parts[p.Island[v]], pair{p.Graph.Values.Poses[v].T, x.T})
			}
		}
		sum, n := 0.0, 0
		for _, part := range parts {
			if len(part) > 0 {
				e := rmse(part)
				sum += e * e * float64(len(part))
				n += len(part)
			}
		}
		if n > 0 {
			out[i] = figure(math.Sqrt(sum / float64(n)))
		}
	}
	return out, nil
}

// arrived holds the ends of measurements that the agents have: keyframes, by id and by stamp.
type arrived struct{ keys, moments map[adjust.Key]bool }

func (r *Run) arrived() arrived {
	have := arrived{map[adjust.Key]bool{}, map[adjust.Key]bool{}}
	for i, tracks := range r.tracks() {
		for _, t := range tracks {
			key := adjust.Key{Robot: r.Outing.Survey.Robots[i].ID, Session: t.Session}
			for k := range t.IDs {
				key.ID = t.IDs[k]
				have.keys[key] = true
				key.ID = t.StampsNS[k]
				have.moments[key] = true
			}
		}
	}
	return have
}

func (h *arrived) end(robot string, session uint32, key, stamp int64, byStamp bool) bool {
	if byStamp {
		return h.moments[adjust.Key{Robot: robot, Session: session, ID: stamp}]
	}
	return h.keys[adjust.Key{Robot: robot, Session: session, ID: key}]
}

func (h *arrived) from(t *survey.Tie) bool {
	return h.end(t.FromRobot, t.FromSession, t.FromKey, t.FromStampNS, t.FromByStamp)
}

func (h *arrived) to(t *survey.Tie) bool {
	return h.end(t.ToRobot, t.ToSession, t.ToKey, t.ToStampNS, t.ToByStamp)
}

// known returns the survey as far as it had been delivered when the run ended: the keyframes that the agents have, and the
// measurements among them, without the loop closures and sightings that an agent does not hold.
func (r *Run) known() *survey.Survey {
	s := r.Outing.Survey
	have := r.arrived()
	out := &survey.Survey{Meta: s.Meta, Marks: s.Marks}
	closure, sighting := r.closureVerdicts(), r.sightingVerdicts()
	for i := range s.Robots {
		robot := survey.Robot{ID: s.Robots[i].ID}
		for _, k := range s.Robots[i].Keyframes {
			if have.end(robot.ID, k.Session, k.ID, 0, false) {
				robot.Keyframes = append(robot.Keyframes, k)
			}
		}
		for k, m := range s.Robots[i].Relatives {
			if closure[i][k] == msgs.Held && have.end(robot.ID, m.Session, m.From, 0, false) && have.end(robot.ID, m.Session, m.To, 0, false) {
				robot.Relatives = append(robot.Relatives, m)
			}
		}
		for k, m := range s.Robots[i].Sightings {
			if sighting[i][k] == msgs.Held && have.end(robot.ID, m.Session, m.Key, m.StampNS, m.ByStamp) {
				robot.Sightings = append(robot.Sightings, m)
			}
		}
		out.Robots = append(out.Robots, robot)
	}
	for i := range s.Ties {
		if t := &s.Ties[i]; have.from(t) && have.to(t) {
			out.Ties = append(out.Ties, *t)
		}
	}
	return out
}

// verdicts returns the coordinator's findings by tie.
func (r *Run) verdicts() map[string]*coordinator.Finding {
	found := r.Coordinator.Findings()
	out := make(map[string]*coordinator.Finding, len(r.Outing.Survey.Ties))
	none := &coordinator.Finding{}
	for i := range r.Outing.Survey.Ties {
		out[r.Outing.Survey.Ties[i].ID] = none
	}
	for i := range found {
		out[found[i].Tie] = &found[i]
	}
	return out
}

// measured tells for each tie whether its robot had come to its keyframe before the run ended.
func (r *Run) measured() []bool {
	s := r.Outing.Survey
	have := r.arrived()
	out := make([]bool, len(s.Ties))
	for i := range s.Ties {
		out[i] = have.from(&s.Ties[i])
	}
	return out
}
