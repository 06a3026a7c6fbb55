package agent

import (
	"errors"
	"fmt"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
	"selvage/partition"
)

// model is what a summary says of one session: the condensed graph and the poses it was linearised at.
type model struct {
	condensed *partition.Condensed
	at        []lie.SE3 // of all keyframes
	cost      float64
}

// graph returns the model as a graph over its junctions, at the given poses of all keyframes of the session.
func (m *model) graph(dim int, poses []lie.SE3) *posegraph.Graph {
	j := m.condensed.Junctions
	at := make([]lie.SE3, len(j))
	for k, v := range j {
		at[k] = poses[v]
	}
	g := posegraph.New(dim, at)
	cliques := g.AddCliques()
	for i := range m.condensed.Cliques {
		c := &m.condensed.Cliques[i]
		nodes, xbar := make([]int32, len(c.Nodes)), make([]lie.SE3, len(c.Nodes))
		for k, v := range c.Nodes {
			p, _ := slices.BinarySearch(j, v)
			nodes[k], xbar[k] = int32(p), m.at[v]
		}
		cliques.Add(nodes, xbar, c.H, c.B)
	}
	return g
}

// model condenses the session at its present poses.
func (s *session) model() (*model, error) {
	c, err := s.condense()
	if err != nil {
		return nil, err
	}
	return &model{condensed: c, at: slices.Clone(s.graph.Values.Poses), cost: s.graph.Cost()}, nil
}

// change estimates by how much F would fall if the model next were told instead of the present one, at the present poses: the two
// disagree about the gradient there, and that disagreement moves the solution. The stiffness of the robot's own map alone is
// counted, so the estimate is never too small. Models over different junctions differ by as much as matters: ok is false.
func (s *session) change(next *model) (fall float64, ok bool) {
	if s.told == nil || !slices.Equal(s.told.condensed.Junctions, next.condensed.Junctions) {
		return 0, false
	}
	if len(next.condensed.Cliques) == 0 {
		return 0, true
	}
	poses := s.graph.Values.Poses
	told, fresh := s.told.graph(s.graph.Dim, poses), next.graph(s.graph.Dim, poses)
	fixed := fresh.Anchors()
	a, err := posegraph.NewSolver(told, fixed, sparse.Options{})
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

// summarise makes the next summary of all sessions that have separators. Sessions with new measurements are brought to their own
// optimum first; the others are condensed where they are, at the base's solution. Of a session whose measurements do not hold
// together the last summary is said again, as far as there is one; the error says why. With nothing to say the payload is nil.
func (a *Agent) summarise() ([]byte, error) {
	m := msgs.Summary{
		Header: a.header(0, a.latestSession()), Version: a.version + 1, Answers: a.applied, Dim: a.width(),
	}
	var refused error
	models := make([]*model, len(a.sessions))
	for i, s := range a.sessions {
		if s.separators == 0 {
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
			s.told, s.dirty = models[i], false
		}
	}
	return payload, refused
}

// next makes the model of the next summary.
func (s *session) next() (*model, error) {
	if s.dirty {
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
	p := msgs.Part{Session: s.id, Cost: m.cost, Keyframes: len(m.at)}
	order := slices.Clone(m.condensed.Junctions) // by id, as the wire wants it
	slices.SortFunc(order, func(a, b int32) int {
		if s.keys[a] < s.keys[b] {
			return -1
		}
		return 1
	})
	place := make(map[int32]int, len(order))
	for i, v := range order {
		place[v] = i
		p.Junctions = append(p.Junctions, msgs.Junction{
			ID: s.keys[v], Pose: wirePose(&m.at[v], s.dim), TravelM: s.travel[v], StampNS: s.stamps[v], Resolved: s.resolved[v],
		})
	}
	for i := range m.condensed.Cliques {
		c := &m.condensed.Cliques[i]
		nodes := make([]int, len(c.Nodes))
		for k, v := range c.Nodes {
			nodes[k] = place[v]
		}
		p.Cliques = append(p.Cliques, msgs.Clique{Nodes: nodes, H: c.H, B: c.B})
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
