package agent

import (
	"fmt"
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
	"selvage/partition"
)

// session is one run of the front end: a pose graph in a frame of its own.
type session struct {
	id         uint32
	dim        int             // of the survey, 2 or 3
	keys       []int64         // in the order they came
	index      map[int64]int32 // key -> variable
	stamps     []int64
	front      []lie.SE3 // as the front end had them
	travel     []float64 // metres along the track
	graph      *posegraph.Graph
	factors    *posegraph.Between
	separator  []bool
	separators int
	resolved   map[int32][]int64 // variable -> stamps asked for that it answers
	newest     int32             // variable of the newest keyframe of the front end
	inserted   int               // keyframes made for a stamp
	chain      *evidence.Chain   // of the keyframes of the front end
	place      []int32           // variable -> place in the chain; -1 for inserted keyframes
	closures   []int32           // factors that are judged
	findings   []evidence.ClosureFinding

	dirty  bool // measurements came since the newest summary
	solved int  // measurements there were when the map was last solved
	joined bool
	datum  lie.SE3 // datum_from_session of the newest correction
	island string
	told   *model // what the newest summary says
}

func newSession(id uint32, dim int) *session {
	g := posegraph.New(3*(dim-1), nil)
	return &session{
		id: id, dim: dim, index: map[int64]int32{}, graph: g, factors: g.AddBetween(), resolved: map[int32][]int64{},
		datum: lie.Identity(), chain: evidence.NewChain(dim),
	}
}

func (s *session) addKeyframe(k *Keyframe) error {
	if _, known := s.index[k.ID]; known {
		return fmt.Errorf("keyframe %d of session %d came twice", k.ID, s.id)
	}
	n := len(s.keys)
	pose, travel, step := k.Pose, 0.0, lie.Identity()
	if last := s.newest; n > 0 {
		step = s.front[last].Between(k.Pose)
		pose = s.graph.Values.Poses[last].Mul(step)
		travel = s.travel[last] + math.Sqrt(step.T[0]*step.T[0]+step.T[1]*step.T[1]+step.T[2]*step.T[2])
	}
	if !(travel <= msgs.MaxMetres) {
		return fmt.Errorf("keyframe %d of session %d: %g m from the start, at most %g expected", k.ID, s.id, travel, float64(msgs.MaxMetres))
	}
	s.place = append(s.place, int32(s.chain.Len()))
	s.chain.Keyframe(step)
	s.newest = int32(n)
	s.index[k.ID] = int32(n)
	s.keys = append(s.keys, k.ID)
	s.stamps = append(s.stamps, k.StampNS)
	s.front = append(s.front, k.Pose)
	s.travel = append(s.travel, travel)
	s.separator = append(s.separator, false)
	s.graph.Values.Poses = append(s.graph.Values.Poses, pose)
	s.dirty = true
	return nil
}

func (s *session) addRelative(r *Relative, trusted bool) error {
	i, ok := s.index[r.From]
	j, found := s.index[r.To]
	if !ok || !found || i == j {
		return fmt.Errorf("relative pose from %d to %d of session %d: two known keyframes expected", r.From, r.To, s.id)
	}
	if err := checkMeasurement(&r.Z, &r.Info, s.dim); err != nil {
		return fmt.Errorf("relative pose from %d to %d of session %d: %w", r.From, r.To, s.id, err)
	}
	s.factors.Add(i, j, r.Z, &r.Info)
	switch {
	case !r.Closure:
		s.odometry(i, j, r)
	case !trusted && s.place[i] >= 0 && s.place[j] >= 0:
		s.enter(int32(s.factors.Len() - 1))
	}
	s.dirty = true
	return nil
}

// knows tells whether the session has a keyframe of that id; no session has none.
func (s *session) knows(id int64) bool {
	if s == nil {
		return false
	}
	_, known := s.index[id]
	return known
}

// optimise brings the session to its own optimum, starting from its present poses. When these explain the measurements badly,
// as a front end's first guess may, it also tries the chordal start and keeps the better of the two.
func (s *session) optimise() error {
	s.judge()
	s.solved = s.factors.Len()
	anchors := s.graph.Anchors()
	if len(anchors) == len(s.keys) || s.factors.Len() == 0 {
		return nil
	}
	cost := s.graph.Cost()
	freedom := float64(s.graph.Dim * s.factors.Len())
	if cost > 2*freedom {
		s.tryChordal(anchors, cost)
	}
	solver, err := posegraph.NewSolver(s.graph, anchors, sparse.Options{})
	if err != nil {
		return err
	}
	r := solver.Optimise(posegraph.DefaultOptions())
	if r.Stop == posegraph.Undetermined {
		return fmt.Errorf("session %d: the measurements leave keyframe %d free", s.id, s.keys[r.Weakest])
	}
	return nil
}

// refresh brings the map up to date with measurements that no summary has asked about yet: with the corrected junctions fixed
// where the base put them, or else to the session's own optimum.
func (s *session) refresh() error {
	if s.joined && s.told != nil {
		s.judge()
		return s.settle(slices.Clone(s.told.condensed.Junctions))
	}
	if err := s.optimise(); err != nil {
		return err
	}
	if s.separators == 0 {
		s.dirty = false
	}
	return nil
}

// stale tells whether the map lacks a tenth of its measurements, or any when the robot has settled.
func (s *session) stale(settled bool) bool {
	fresh := s.factors.Len() - s.solved
	return fresh > 0 && (settled || 10*fresh > s.factors.Len())
}

// tryChordal replaces the values by the chordal start with the given variables fixed, if that lowers the cost.
func (s *session) tryChordal(fixed []int32, cost float64) {
	before := append([]lie.SE3(nil), s.graph.Values.Poses...)
	if posegraph.Chordal(s.graph, fixed) != nil || !(s.graph.Cost() < cost) {
		copy(s.graph.Values.Poses, before)
	}
}

// condense condenses the session at its present poses; closures that are not held say nothing.
func (s *session) condense() (*partition.Condensed, error) {
	d := s.graph.Dim
	n := s.factors.Len()
	terms := make([]partition.Quadratic, 0, n)
	h := make([]float64, n*4*d*d)
	b := make([]float64, n*2*d)
	nodes := make([]int32, 2*n)
	for k := range n {
		if s.factors.W[k] == 0 {
			continue
		}
		q := partition.Quadratic{Nodes: nodes[2*k : 2*k+2 : 2*k+2], H: h[k*4*d*d : (k+1)*4*d*d], B: b[k*2*d : (k+1)*2*d]}
		q.Nodes[0], q.Nodes[1] = s.factors.I[k], s.factors.J[k]
		s.factors.Quadratic(k, &s.graph.Values, q.H, q.B)
		terms = append(terms, q)
	}
	var separators []int32
	for i, is := range s.separator {
		if is {
			separators = append(separators, int32(i))
		}
	}
	return partition.CondenseAt(s.graph.Dim, s.graph.Values.Poses, terms, separators)
}
