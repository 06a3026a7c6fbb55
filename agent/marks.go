package agent

import (
	"fmt"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/robust"
	"selvage/msgs"
	"selvage/partition"
)

// sighting is one sighting of a mark.
type sighting struct {
	asked Sighting // as it came, checked
	from  int32    // variable, -1 until its moment is on the track
	mark  int32

	decided bool                 // on the robot's own evidence
	finding robust.Finding       // when decided
	set     *posegraph.Sightings // nil when it is not in the graph
	k       int
}

// refused tells whether the robot's own evidence speaks against a sighting.
func (e *sighting) refused() bool { return e.decided && e.finding.Verdict == evidence.Refused }

// mark is what a session knows of a mark. As a point of the graph it takes part while its sightings place it.
type mark struct {
	name   string
	wanted bool // the base asked for it
	placed bool
	at     [3]float64 // in the frame of the session, when it was last in the graph
	seen   int        // sightings on the track
	adrift int        // of these, when they left it free to run away; it waits for more
	point  int32      // -1 when it is not in the graph
	from   int32      // variable that saw it first, of those in the graph
}

// addSighting notes a sighting, which is in order but for the place it is from.
func (s *session) addSighting(e *Sighting, sight *Sight) error {
	from := int32(-1)
	if !e.ByStamp {
		v, known := s.index[e.ID]
		if !known {
			return fmt.Errorf("keyframe %d is not known", e.ID)
		}
		from = v
	} else if err := s.begins(e.StampNS); err != nil {
		return err
	}
	m, known := s.markOf[e.Mark]
	if !known {
		if len(s.marks) == msgs.MaxPoints {
			return fmt.Errorf("there are %d marks already, the most a summary can hold", msgs.MaxPoints)
		}
		m = int32(len(s.marks))
		s.markOf[e.Mark] = m
		s.marks = append(s.marks, mark{name: e.Mark, point: -1})
	}
	asked := *e
	asked.Sight = *sight
	i := int32(len(s.sightings))
	s.sightings = append(s.sightings, sighting{asked: asked, from: -1, mark: m})
	if e.ByStamp {
		from, known = s.resolve(e.StampNS)
		if !known {
			s.await(awaited{e.StampNS, i})
			return nil
		}
	}
	s.begin(i, from)
	return nil
}

// begin lets a sighting take part, from a variable.
func (s *session) begin(i, from int32) {
	e := &s.sightings[i]
	e.from = from
	s.begun++
	s.marks[e.mark].seen++
	s.dirty = true
}

// enter makes the sets of sightings anew: those of marks that they place, without what the robot's own evidence refuses unless all is
// asked for. A mark belongs to that part of the session which saw it first, should relative poses not hold the session together.
// Points keep their places; those that had none are placed from the poses. Coarse turns ranges with bearings into positions.
func (s *session) enter(all, coarse bool) {
	g := s.graph
	for k, m := range s.points {
		s.marks[m].at = g.Values.Points[k]
	}
	g.Sets, g.Values.Points, s.points = g.Sets[:1], nil, s.points[:0]
	if s.begun == 0 {
		return
	}
	part, _ := s.relatives().Components()
	home := make([]int32, len(s.marks))
	for m := range home {
		home[m] = -1
	}
	used := func(e *sighting) bool {
		if e.from < 0 || !all && e.refused() {
			return false
		}
		if home[e.mark] < 0 {
			home[e.mark] = part[e.from]
		}
		return home[e.mark] == part[e.from]
	}
	trial := posegraph.New(g.Dim, g.Values.Poses)
	trial.Values.Points = make([][3]float64, len(s.marks))
	sets := sets{graph: trial}
	for i := range s.sightings {
		if e := &s.sightings[i]; used(e) {
			sets.add(e, e.mark, coarse)
		}
	}
	out := make([]bool, len(s.marks))
	for _, m := range posegraph.PlacePoints(trial) {
		out[m] = true
	}
	for m := range s.marks {
		k := &s.marks[m]
		k.point, k.from = -1, -1
		if out[m] || k.adrift == k.seen {
			k.placed = false
			continue
		}
		if !k.placed {
			k.placed, k.at = true, trial.Values.Points[m]
		}
		k.point = int32(len(s.points))
		s.points = append(s.points, int32(m))
		g.Values.Points = append(g.Values.Points, k.at)
	}
	sets.graph = g
	clear(sets.made[:])
	for i := range s.sightings {
		e := &s.sightings[i]
		e.set = nil
		if !used(e) || s.marks[e.mark].point < 0 {
			continue
		}
		m := &s.marks[e.mark]
		e.set = sets.add(e, m.point, coarse)
		e.k = e.set.Len() - 1
		if m.from < 0 {
			m.from = e.from
		}
	}
}

// relatives returns the graph without sightings, to look at.
func (s *session) relatives() *posegraph.Graph {
	g := posegraph.New(s.graph.Dim, s.graph.Values.Poses)
	g.Sets = s.graph.Sets[:1]
	return g
}

// sets are the sets of sightings of a graph, one for each sense, made as they are needed.
type sets struct {
	graph *posegraph.Graph
	made  [posegraph.Position + 1]*posegraph.Sightings
}

// add enters a sighting of a point.
func (s *sets) add(e *sighting, point int32, coarse bool) *posegraph.Sightings {
	sense, z, info := e.asked.Sense, e.asked.Value, e.asked.Info
	if coarse && sense == posegraph.RangeBearing {
		sense = posegraph.Position
		z, info = posegraph.Cartesian(s.graph.Dim, z, &info)
	}
	if s.made[sense] == nil {
		s.made[sense] = s.graph.AddSightings(sense)
	}
	s.made[sense].Add(e.from, point, e.asked.Mount, [3]float64{}, z, &info)
	return s.made[sense]
}

// replace places the points anew from the poses, but for some.
func (s *session) replace(but []int32) {
	g := s.graph
	before := slices.Clone(g.Values.Points)
	posegraph.PlacePoints(g)
	for _, k := range but {
		g.Values.Points[k] = before[k]
	}
}

// sightingTerms appends the terms of the sightings for condensing.
func (s *session) sightingTerms(terms []partition.Quadratic) []partition.Quadratic {
	g := s.graph
	n := g.Dim + 3
	for _, set := range g.Sets[1:] {
		set := set.(*posegraph.Sightings)
		h, b, nodes := make([]float64, set.Len()*n*n), make([]float64, set.Len()*n), make([]int32, 2*set.Len())
		for k := range set.Len() {
			q := partition.Quadratic{Nodes: nodes[2*k : 2*k+2 : 2*k+2], H: h[k*n*n : (k+1)*n*n], B: b[k*n : (k+1)*n]}
			q.Nodes[0], q.Nodes[1] = set.From[k], g.Point(set.To[k])
			set.Quadratic(k, &g.Values, q.H, q.B)
			terms = append(terms, q)
		}
	}
	return terms
}

// bound tells whether the session has anything to tie it to others: separators, or marks that the base asked for.
func (s *session) bound() bool {
	if s.separators > 0 {
		return true
	}
	for _, m := range s.points {
		if s.marks[m].wanted {
			return true
		}
	}
	return false
}

// want notes that the base asks for a mark, and tells whether that is news.
func (s *session) want(name string) bool {
	m, known := s.markOf[name]
	if !known || s.marks[m].wanted {
		return false
	}
	s.marks[m].wanted = true
	return s.marks[m].point >= 0
}

// pointOf returns the point of a mark, -1 when it has none.
func (s *session) pointOf(m int32, known bool) int32 {
	if !known {
		return -1
	}
	return s.marks[m].point
}

// news tells whether a session that is not tied to others has seen marks that no summary has told.
func (s *session) news() bool {
	if s.bound() || len(s.points) == 0 {
		return false
	}
	return s.told == nil || !slices.Equal(s.told.seen, s.names(func(int) bool { return true }))
}

// names lists the marks of some points, ascending.
func (s *session) names(of func(point int) bool) (names []string) {
	for k, m := range s.points {
		if of(k) {
			names = append(names, s.marks[m].name)
		}
	}
	slices.Sort(names)
	return names
}

// carry moves the points with the poses that saw them first.
func (s *session) carry(before []lie.SE3) {
	for k, m := range s.points {
		v := s.marks[m].from
		p := &s.graph.Values.Points[k]
		*p = s.graph.Values.Poses[v].Apply(before[v].Inv().Apply(*p))
		if s.dim == 2 {
			p[2] = 0
		}
	}
}

// Mark is a mark as a session has it.
type Mark struct {
	Name  string
	Place [3]float64 // in the frame of the session, metres; the third is zero in the plane
}

// SightingFinding is what the agent found of one sighting.
type SightingFinding struct {
	Sighting // as the agent took it
	Verdict  msgs.VerdictKind
	Reason   string
	// Statistic is how far it lies from what all others predict, chi-square with DoF degrees of freedom when it is true; both are 0 when
	// nothing else speaks of it or nobody has looked yet.
	Statistic float64
	DoF       int
}

// Sightings returns what the agent found of the sightings of marks, sessions ascending, in the order they came. Open are those that
// came after the map was last brought up to date, and those of marks that have no place yet.
func (a *Agent) Sightings() []SightingFinding {
	var out []SightingFinding
	for _, s := range a.sessions {
		for i := range s.sightings {
			out = append(out, s.tell(&s.sightings[i]))
		}
	}
	return out
}

func (s *session) tell(e *sighting) SightingFinding {
	f := SightingFinding{Sighting: e.asked, Verdict: msgs.Open}
	switch m := &s.marks[e.mark]; {
	case e.from < 0:
		f.Reason = "the odometry has not reached its moment"
	case m.point < 0 && !e.refused():
		f.Reason = "the sightings of its mark do not place it"
	case e.decided:
		f.Reason, f.Statistic, f.DoF = e.finding.Reason(), e.finding.Statistic, e.finding.DoF
		switch e.finding.Verdict {
		case evidence.Held:
			f.Verdict = msgs.Held
		case evidence.Refused:
			f.Verdict = msgs.Refused
		}
	case e.set != nil && s.trusting:
		f.Verdict, f.Reason = msgs.Held, "taken as true"
	default:
		f.Reason = "not looked at yet"
	}
	return f
}
