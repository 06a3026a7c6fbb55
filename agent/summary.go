package agent

import (
	"cmp"
	"errors"
	"fmt"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
	"selvage/partition"
)

// model is what a summary says of one session: the condensed graph and the values it was linearised at.
type model struct {
	condensed *partition.Condensed
	at        posegraph.Values // of all keyframes and points
	marks     []int32          // of the points
	seen      []string         // marks that are no junctions, ascending
	cost      float64
}

// poses returns how many of the junctions are poses; the others are points.
func (m *model) poses() int {
	n, _ := slices.BinarySearch(m.condensed.Junctions, int32(len(m.at.Poses)))
	return n
}

// point returns the point that a variable is.
func (m *model) point(v int32) int32 { return v - int32(len(m.at.Poses)) }

// fixed returns the junctions as variables of the session's graph as it is now.
func (m *model) fixed(s *session) []int32 {
	n := m.poses()
	out := slices.Clone(m.condensed.Junctions[:n])
	for _, v := range m.condensed.Junctions[n:] {
		if k := s.marks[m.marks[m.point(v)]].point; k >= 0 {
			out = append(out, s.graph.Point(k))
		}
	}
	return out
}

// graph returns the model as a graph over its junctions, at the given values of all keyframes and points of the model.
func (m *model) graph(dim int, v *posegraph.Values) *posegraph.Graph {
	j, n := m.condensed.Junctions, m.poses()
	g := posegraph.New(dim, make([]lie.SE3, n))
	for k, w := range j[:n] {
		g.Values.Poses[k] = v.Poses[w]
	}
	for _, w := range j[n:] {
		g.Values.Points = append(g.Values.Points, v.Points[m.point(w)])
	}
	cliques, marked := g.AddCliques(), g.AddMarkCliques()
	for i := range m.condensed.Cliques {
		c := &m.condensed.Cliques[i]
		var nodes, points []int32
		var at []lie.SE3
		var places [][3]float64
		for _, w := range c.Nodes {
			p, _ := slices.BinarySearch(j, w)
			if p < n {
				nodes, at = append(nodes, int32(p)), append(at, m.at.Poses[w])
			} else {
				points, places = append(points, int32(p-n)), append(places, m.at.Points[m.point(w)])
			}
		}
		if len(points) == 0 {
			cliques.Add(nodes, at, c.H, c.B)
		} else {
			marked.Add(nodes, at, points, places, c.H, c.B)
		}
	}
	return g
}

// model condenses the session at its present values. Of a session that is not tied to others there is only to say what it has seen.
func (s *session) model() (*model, error) {
	m := &model{cost: s.graph.Cost(), marks: slices.Clone(s.points)}
	if s.bound() {
		c, err := s.condense()
		if err != nil {
			return nil, err
		}
		m.condensed = c
	} else {
		m.condensed = &partition.Condensed{Junctions: []int32{0}}
	}
	m.at = posegraph.Values{Poses: slices.Clone(s.graph.Values.Poses), Points: slices.Clone(s.graph.Values.Points)}
	told := make([]bool, len(m.marks))
	for _, v := range m.condensed.Junctions[m.poses():] {
		told[m.point(v)] = true
	}
	m.seen = s.names(func(k int) bool { return !told[k] })
	return m, nil
}

// change estimates by how much F would fall if the model next were told instead of the present one, at the present poses: the two
// disagree about the gradient there, and that disagreement moves the solution. The stiffness of the robot's own map alone is
// counted, so the estimate is never too small. Models over different junctions differ by as much as matters: ok is false.
func (s *session) change(next *model) (fall float64, ok bool) {
	told := s.told
	if told == nil || len(told.at.Poses) != len(next.at.Poses) || !slices.Equal(told.marks, next.marks) || !slices.Equal(told.condensed.Junctions, next.condensed.Junctions) {
		return 0, false
	}
	if len(next.condensed.Cliques) == 0 {
		return 0, true
	}
	stale, fresh := told.graph(s.graph.Dim, &next.at), next.graph(s.graph.Dim, &next.at)
	fixed := fresh.Anchors()
	a, err := posegraph.NewSolver(stale, fixed, sparse.Options{})
	if err != nil {
		return 0, false
	}
	b, err := posegraph.NewSolver(fresh, fixed, sparse.Options{})
	if err != nil {
		return 0, false
	}
	_, before := a.Linearise()
	_, after := b.Linearise()
	difference := make([]float64, len(after))
	for i := range after {
		difference[i] = after[i] - before[i]
	}
	fall, err = b.Decrease(difference)
	return fall, err == nil
}

// summarise makes the next summary of all sessions that have separators or have seen marks. Sessions with new measurements are brought to their own
// optimum first; the others are condensed where they are, at the base's solution. Of a session whose measurements do not hold
// together the last summary is said again, as far as there is one; the error says why. With nothing to say the payload is nil.
func (a *Agent) summarise() ([]byte, error) {
	m := msgs.Summary{
		Header: a.header(0, a.latestSession()), Version: a.version + 1, Answers: a.applied, Dim: a.width(),
	}
	var refused error
	models := make([]*model, len(a.sessions))
	for i, s := range a.sessions {
		if !s.bound() && len(s.points) == 0 {
			continue
		}
		next, err := s.next()
		if err != nil {
			refused = errors.Join(refused, err)
			if s.told != nil {
				m.Parts = append(m.Parts, s.part(s.told))
			}
			continue
		}
		models[i] = next
		m.Parts = append(m.Parts, s.part(next))
	}
	if len(m.Parts) == 0 {
		return nil, refused
	}
	payload, err := m.Marshal()
	if err != nil {
		return nil, errors.Join(refused, err)
	}
	a.version++
	for i, s := range a.sessions {
		if models[i] != nil {
			s.told = models[i]
			s.dirty = s.dirty && !s.bound()
		}
	}
	return payload, refused
}

// next makes the model of the next summary.
func (s *session) next() (*model, error) {
	if s.dirty && s.bound() {
		if err := s.optimise(); err != nil {
			return nil, err
		}
	}
	m, err := s.model()
	if err != nil {
		return nil, fmt.Errorf("session %d: %w", s.id, err)
	}
	return m, nil
}

// part writes a model for the wire.
func (s *session) part(m *model) msgs.Part {
	p := msgs.Part{Session: s.id, Cost: m.cost, Keyframes: len(m.at.Poses), Seen: m.seen}
	n := m.poses()
	place := make(map[int32]int, len(m.condensed.Junctions))
	poses := slices.Clone(m.condensed.Junctions[:n]) // by id, as the wire wants it
	slices.SortFunc(poses, func(a, b int32) int { return cmp.Compare(s.keys[a], s.keys[b]) })
	for i, v := range poses {
		place[v] = i
		p.Junctions = append(p.Junctions, msgs.Junction{
			ID: s.keys[v], Pose: wirePose(&m.at.Poses[v], s.dim), TravelM: s.travel[v], StampNS: s.stamps[v], Resolved: s.resolved[v],
		})
	}
	name := func(v int32) string { return s.marks[m.marks[m.point(v)]].name }
	points := slices.Clone(m.condensed.Junctions[n:]) // by name
	slices.SortFunc(points, func(a, b int32) int { return cmp.Compare(name(a), name(b)) })
	for i, v := range points {
		place[v] = i
		p.Points = append(p.Points, msgs.Point{Mark: name(v), At: m.at.Points[m.point(v)]})
	}
	if first, is := place[0]; is && s.level > 0 && len(m.condensed.Cliques) > 0 {
		up := s.front[0].R
		p.Levels = []msgs.Level{{Node: first, Up: [3]float64{up[6], up[7], up[8]}, Sigma: s.level}}
	}
	for i := range m.condensed.Cliques {
		c := &m.condensed.Cliques[i]
		q := msgs.Clique{H: c.H, B: c.B}
		for _, v := range c.Nodes {
			if int(v) < len(m.at.Poses) {
				q.Nodes = append(q.Nodes, place[v])
			} else {
				q.Points = append(q.Points, place[v])
			}
		}
		p.Cliques = append(p.Cliques, q)
	}
	return p
}

// wirePose writes a pose for the wire, exactly planar in the plane.
func wirePose(x *lie.SE3, dim int) msgs.Pose {
	q := x.Quat()
	p := msgs.Pose{T: x.T, Q: q}
	if dim == 2 {
		p.T[2], p.Q[0], p.Q[1] = 0, 0, 0
	}
	return p
}

// compact picks the measured components out of a 6 x 6 matrix: all in space, x, y and rz in the plane.
func compact(m *[36]float64, dim int) []float64 {
	if dim == 3 {
		return slices.Clone(m[:])
	}
	out := make([]float64, 0, 9)
	for _, r := range [3]int{0, 1, 5} {
		for _, c := range [3]int{0, 1, 5} {
			out = append(out, m[6*r+c])
		}
	}
	return out
}
