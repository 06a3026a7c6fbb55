package agent

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/robust"
	"selvage/internal/sparse"
	"selvage/msgs"
)

// relinearise is the share of F (or of 1, when F is smaller) that condensing again must be worth.
const relinearise = 3e-12

// correct applies a correction: junctions go where the base found them, interior poses follow. A correction that is not newer than
// the last one applied is dropped; keyframes it names that this robot does not know are left out. A session that it would tear out of
// bounds stays as it was.
func (a *Agent) correct(c *msgs.Correction) error {
	if c.Dim != a.width() {
		return fmt.Errorf("correction of poses with %d components, this survey has %d", c.Dim, a.width())
	}
	if err := a.addressed(c.Fleet, c.Robot, c.Term); err != nil {
		return err
	}
	a.met(c.Epoch.Incarnation)
	if c.SummaryVersion >= a.version {
		a.answered = true
	}
	if c.Epoch.Compare(a.applied) <= 0 || c.Epoch.Compare(a.floor) < 0 {
		return nil
	}
	a.applied = c.Epoch
	a.beatDue = true
	var refused error
	for i := range c.Parts {
		p := &c.Parts[i]
		s := a.session(p.Session)
		if s == nil {
			continue
		}
		if err := s.followSafely(p); err != nil {
			refused = errors.Join(refused, err)
			continue
		}
		s.joined, s.island = p.Joined, p.Island
		if len(p.IDs) == 0 {
			continue
		}
		if s.dirty || s.told == nil || !s.bound() {
			continue // new measurements are waiting: the next summary says it all
		}
		next, err := s.model()
		if err != nil {
			refused = errors.Join(refused, err)
			continue
		}
		if fall, ok := s.change(next); !ok || fall > relinearise*max(next.cost, 1) {
			a.relinear = true
		}
	}
	return refused
}

// followSafely follows a correction, or leaves the session as it was when it would be torn farther apart than a summary can tell.
func (s *session) followSafely(p *msgs.CorrectedPart) error {
	if len(p.IDs) == 0 {
		return nil
	}
	v := &s.graph.Values
	datum, poses, points := s.datum, slices.Clone(v.Poses), slices.Clone(v.Points)
	err := s.follow(p)
	if err == nil {
		err = s.check()
	}
	if err != nil {
		s.datum = datum
		copy(v.Poses, poses)
		copy(v.Points, points)
	}
	return err
}

// check refuses a map that is out of bounds.
func (s *session) check() error {
	for v := range s.graph.Values.Poses {
		if checkPose(&s.graph.Values.Poses[v], s.dim) != nil {
			return fmt.Errorf("correction of session %d carries keyframe %d out of bounds", s.id, s.keys[v])
		}
	}
	for k := range s.graph.Values.Points {
		for _, x := range s.graph.Values.Points[k] {
			if !(math.Abs(x) <= farthest) {
				return fmt.Errorf("correction of session %d carries mark %s out of bounds", s.id, s.marks[s.points[k]].name)
			}
		}
	}
	return nil
}

// follow moves the session's map after its corrected junctions: these exactly, the other poses first by the correction interpolated
// along the track and the other marks with the poses that saw them, then all by a solve of their own with the junctions fixed.
func (s *session) follow(p *msgs.CorrectedPart) error {
	s.datum = lie.FromQuat(p.DatumFromSession.T, p.DatumFromSession.Q)
	inverse := s.datum.Inv()
	poses := s.graph.Values.Poses
	moved := make([]int32, 0, len(p.IDs))
	target := make(map[int32]lie.SE3, len(p.IDs))
	for i, id := range p.IDs {
		if v, ok := s.index[id]; ok {
			moved = append(moved, v)
			target[v] = inverse.Mul(lie.FromQuat(p.Poses[i].T, p.Poses[i].Q))
		}
	}
	if len(moved) == 0 {
		return nil
	}
	before := slices.Clone(poses)
	s.spread(moved, target)
	for _, v := range moved {
		poses[v] = target[v]
	}
	if s.dim == 2 {
		for v := range poses {
			poses[v] = lie.Planar(&poses[v]).Spatial()
		}
	}
	s.carry(before)
	fixed := moved
	for i := range p.Points {
		m, known := s.markOf[p.Points[i].Mark]
		if k := s.pointOf(m, known); k >= 0 {
			at := inverse.Apply(p.Points[i].At)
			if s.dim == 2 {
				at[2] = 0
			}
			s.graph.Values.Points[k] = at
			fixed = append(fixed, s.graph.Point(k))
		}
	}
	return s.settle(fixed)
}

// spread moves the poses by the corrections of some, interpolated along the track.
func (s *session) spread(moved []int32, target map[int32]lie.SE3) {
	poses := s.graph.Values.Poses
	order := s.along()
	place := make([]int, len(order)) // variable -> place along the track
	for i, v := range order {
		place[v] = i
	}
	slices.SortFunc(moved, func(a, b int32) int { return place[a] - place[b] })
	shift := make([]lie.SE3, len(moved)) // session_from_session, junction by junction
	for i, v := range moved {
		shift[i] = target[v].Mul(poses[v].Inv())
	}
	next := 0
	for i, v := range order {
		for next < len(moved) && place[moved[next]] < i {
			next++
		}
		switch {
		case next == len(moved):
			poses[v] = shift[next-1].Mul(poses[v])
		case next == 0 || moved[next] == v:
			poses[v] = shift[next].Mul(poses[v])
		default:
			a, b := place[moved[next-1]], place[moved[next]]
			share := float64(i-a) / float64(b-a)
			move := between(&shift[next-1], &shift[next], share, s.dim)
			poses[v] = move.Mul(poses[v])
		}
	}
}

// settle solves for the interior with the given variables fixed. Sightings that nobody has judged yet are left out where they contradict
// the rest; that decides nothing.
func (s *session) settle(fixed []int32) error {
	s.solved = s.measured()
	poses := len(s.keys)
	component, count := s.graph.Components()
	held := make([]bool, count)
	for _, v := range fixed {
		if int(v) < poses { // a point does not keep a part from turning
			held[component[v]] = true
		}
	}
	for v, c := range component { // a part without a corrected junction keeps its first pose
		if !held[c] {
			held[c] = true
			fixed = append(fixed, int32(v))
		}
	}
	if len(fixed) == s.graph.Variables() {
		return nil
	}
	var fixedPoses, fixedPoints []int32
	for _, v := range fixed {
		if int(v) < poses {
			fixedPoses = append(fixedPoses, v)
		} else {
			fixedPoints = append(fixedPoints, v-int32(poses))
		}
	}
	s.tryChordal(fixedPoses, fixedPoints)
	solver, err := posegraph.NewSolver(s.graph, fixed, sparse.Options{})
	if err != nil {
		return err
	}
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-14
	if keep, doubts := s.doubts(); doubts {
		robust.Review(s.graph, solver, robust.Options{Adjust: o, Keep: keep})
	} else {
		solver.Optimise(o)
	}
	return nil
}

// Track is one session's map as the agent has it.
type Track struct {
	Session          uint32
	Joined           bool
	Island           string
	DatumFromSession lie.SE3
	IDs              []int64
	StampsNS         []int64
	Poses            []lie.SE3 // session_from_keyframe; DatumFromSession times these is the map in the datum
	Marks            []Mark    // in the order they were first seen; only those that sightings place
}

// Tracks returns a copy of the agent's map, sessions ascending.
func (a *Agent) Tracks() []Track {
	var out []Track
	for _, s := range a.sessions {
		t := Track{
			Session: s.id, Joined: s.joined, Island: s.island, DatumFromSession: s.datum, IDs: slices.Clone(s.keys),
			StampsNS: slices.Clone(s.stamps), Poses: slices.Clone(s.graph.Values.Poses),
		}
		for k, m := range s.points {
			t.Marks = append(t.Marks, Mark{s.marks[m].name, s.graph.Values.Points[k]})
		}
		out = append(out, t)
	}
	return out
}

// Applied returns the epoch of the newest correction applied.
func (a *Agent) Applied() msgs.Epoch { return a.applied }

// Raw returns what the robot's graph would take if it crossed the link itself, in bytes.
func (a *Agent) Raw() int { return a.rawNow }

// Settled tells whether the agent has nothing left to send or to hear: every tie is safe, the newest summary is answered and
// says all there is to say.
func (a *Agent) Settled() bool {
	if a.safe < a.newest || a.payload != nil && !a.answered || a.wanted || a.relinear || a.beatDue {
		return false
	}
	for _, s := range a.sessions {
		if s.dirty && s.bound() || s.news() {
			return false
		}
	}
	return true
}
