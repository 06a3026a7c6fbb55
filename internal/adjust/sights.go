package adjust

import (
	"fmt"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// Point is a point of the graph: a mark, or what one island knows of it where islands do not hang together.
type Point struct {
	Mark   int   // of the survey
	Island int32 // that has seen it
	label  int32 // of the poses that have
}

// sighted is one sighting of a mark, or one tie that is less than a pose, whether or not it is in the graph at present.
type sighted struct {
	from  int32 // variable that sees
	to    int32 // variable of the robot seen, -1 for a mark
	mark  int32
	sense posegraph.Sense
	mount lie.SE3
	spot  [3]float64
	z     [3]float64
	info  lie.Mat3
	out   bool // for good: see LeaveOut
	Sight
}

// Sight tells where a sighting of a mark, or a tie that is less than a pose, stands in the graph.
type Sight struct {
	Tie             int                  // of the survey, -1 for the sighting of a mark
	Robot, Sighting int                  // of the survey, for the sighting of a mark
	Set             *posegraph.Sightings // nil when it is not in the graph
	K               int                  // factor of Set
}

// Sights lists the partial ties that are held, then the sightings of marks, in the order of the survey.
func (p *Problem) Sights() []Sight {
	out := make([]Sight, len(p.sights))
	for i := range p.sights {
		out[i] = p.sights[i].Sight
	}
	return out
}

var senses = map[survey.Kind]posegraph.Sense{
	survey.Position: posegraph.Position, survey.RangeBearing: posegraph.RangeBearing,
	survey.Range: posegraph.Range, survey.Bearing: posegraph.Bearing,
}

// addSight notes a sight of something by a robot.
func (p *Problem) addSight(s *survey.Survey, robot string, kind survey.Kind, sight *survey.Sight, e sighted) error {
	info, err := sight.Information(s.Meta.Dimension)
	if err != nil {
		return err
	}
	mount, err := Mounting(s, robot, sight.Sensor)
	if err != nil {
		return err
	}
	e.sense, e.mount, e.z, e.info = senses[kind], mount, sight.Value, info
	p.sights = append(p.sights, e)
	return nil
}

// Mounting returns the pose in base_link of a mounting of a robot, by its name; without a name, of base_link itself.
func Mounting(s *survey.Survey, robot, name string) (lie.SE3, error) {
	for i := range s.Meta.Robots {
		if m := &s.Meta.Robots[i]; m.ID == robot {
			if x, ok := m.MountPose(name); ok {
				return Pose(x), nil
			}
		}
	}
	if name == "" {
		return lie.Identity(), nil
	}
	return lie.SE3{}, fmt.Errorf("robot %s has no mounting %q", robot, name)
}

// addEncounter notes tie k, which sees another robot.
func (p *Problem) addEncounter(s *survey.Survey, k int, from, to int32) error {
	t := &s.Ties[k]
	target, err := Mounting(s, t.ToRobot, t.Sight.Target)
	if err != nil {
		return err
	}
	return p.addSight(s, t.FromRobot, t.Kind, &t.Sight, sighted{from: from, to: to, spot: target.T, Sight: Sight{Tie: k}})
}

// addSightings notes the sightings of marks, but for those of sessions that a person has ruled refused.
func (p *Problem) addSightings(s *survey.Survey, m *moments) error {
	p.marks = s.Marks
	number := make(map[string]int32, len(s.Marks))
	for i := range s.Marks {
		number[s.Marks[i].Name] = int32(i)
	}
	for i := range s.Robots {
		r := &s.Robots[i]
		refused := map[uint32]bool{} // by session
		for k := range r.Sightings {
			e := &r.Sightings[k]
			out, known := refused[e.Session]
			if !known {
				u := s.UnitRuling(r.ID, e.Session)
				out = u != nil && u.Verdict == survey.RuledRefused
				refused[e.Session] = out
			}
			if out {
				continue
			}
			fault := func(err error) error {
				return fmt.Errorf("robot %s, session %d, sighting %d of mark %s: %w", r.ID, e.Session, k+1, e.Mark, err)
			}
			mark, ok := number[e.Mark]
			if !ok {
				return fault(fmt.Errorf("no such mark"))
			}
			from, err := m.end(r.ID, e.Session, e.Key, e.StampNS, e.ByStamp)
			if err != nil {
				return fault(err)
			}
			if err := p.addSight(s, r.ID, e.Kind, &e.Sight, sighted{from: from, to: -1, mark: mark, Sight: Sight{Tie: -1, Robot: i, Sighting: k}}); err != nil {
				return fault(err)
			}
		}
	}
	return nil
}

// connect enters the sightings into the graph, places the points, and finds the islands and what holds them. Marks that their sightings
// do not place are left out. Given a label of each pose, only sightings
// between poses of one label are entered, a mark being another point for each label; nil enters all. Coarse turns
// ranges with bearings into positions.
func (p *Problem) connect(label []int32, coarse bool) {
	lost := map[place]bool{}
	p.enter(label, coarse, lost)
	// Points are numbered by the first sighting: without the lost ones the others keep their order.
	if un := posegraph.PlacePoints(p.Graph); len(un) > 0 {
		for _, k := range un {
			lost[place{p.Points[k].Mark, p.Points[k].label}] = true
		}
		p.enter(label, coarse, lost)
		posegraph.PlacePoints(p.Graph)
	}
	p.Island, p.Islands = p.Graph.Components()
	p.Anchors = p.anchors(p.Graph)
	for k := range p.Points {
		p.Points[k].Island = p.Island[p.Graph.Point(int32(k))]
	}
}

// place is a mark as the poses of one label know it.
type place struct {
	mark  int
	label int32
}

// enter makes the sets of sightings anew.
func (p *Problem) enter(label []int32, coarse bool, lost map[place]bool) {
	g := p.Graph
	g.Sets = append(g.Sets[:0], p.Factors)
	p.addLevels(g)
	g.Values.Points, p.Points, p.solver = nil, nil, nil
	point := map[place]int32{}
	sets := sets{graph: g}
	for i := range p.sights {
		e := &p.sights[i]
		e.Set = nil
		if e.out {
			continue
		}
		l := int32(0)
		if label != nil {
			l = label[e.from]
		}
		to := e.to
		if to < 0 {
			here := place{int(e.mark), l}
			if lost[here] {
				continue
			}
			at, ok := point[here]
			if !ok {
				at = int32(len(p.Points))
				point[here] = at
				p.Points = append(p.Points, Point{Mark: int(e.mark), label: l})
			}
			to = at
		} else if label != nil && label[to] != l {
			continue
		}
		sense, z, info := e.sense, e.z, e.info
		if coarse && sense == posegraph.RangeBearing {
			sense = posegraph.Position
			z, info = posegraph.Cartesian(g.Dim, z, &info)
		}
		e.Set = sets.of(sense, e.to < 0)
		e.K = e.Set.Len()
		e.Set.Add(e.from, to, e.mount, e.spot, z, &info)
	}
	g.Values.Points = make([][3]float64, len(p.Points))
}

// sets are those of a graph, made as they are needed.
type sets struct {
	graph *posegraph.Graph
	made  [2][posegraph.Position + 1]*posegraph.Sightings
}

func (s *sets) of(sense posegraph.Sense, points bool) *posegraph.Sightings {
	if points {
		if s.made[1][sense] == nil {
			s.made[1][sense] = s.graph.AddSightings(sense)
		}
		return s.made[1][sense]
	}
	if s.made[0][sense] == nil {
		s.made[0][sense] = s.graph.AddEncounters(sense)
	}
	return s.made[0][sense]
}

// Describe names a variable of the graph.
func (p *Problem) Describe(variable int32) string {
	if k := int(variable) - len(p.Keys); k >= 0 {
		return fmt.Sprintf("mark %s", p.marks[p.Points[k].Mark].Name)
	}
	k := p.Keys[variable]
	return fmt.Sprintf("keyframe %d of robot %s, session %d", k.ID, k.Robot, k.Session)
}
