package agent

import (
	"fmt"
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
	"selvage/partition"
)

// session is one run of the front end: a pose graph in a frame of its own.
type session struct {
	id         uint32
	dim        int             // of the survey, 2 or 3
	trusting   bool            // closures and sightings are taken as true
	level      float64         // see [Config]; 0 in the plane
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

	byTime   []int32 // variables by their stamps; of equal ones the first that came stands first
	leaving  []int32 // variable -> newest factor that leaves it and may be split, -1 for none
	older    []int32 // factor -> the one before it of these
	awaiting []awaited

	sightings []sighting // in the order they came
	begun     int        // of these, whose moment is on the track
	marks     []mark     // in the order they were first seen
	markOf    map[string]int32
	points    []int32 // point of the graph -> mark

	dirty  bool // measurements came since the newest summary
	solved int  // measurements there were when the map was last solved
	joined bool
	datum  lie.SE3 // datum_from_session of the newest correction
	island string
	told   *model // what the newest summary says
}

func newSession(id uint32, cfg *Config) *session {
	g := posegraph.New(3*(cfg.Dim-1), nil)
	s := &session{
		id: id, dim: cfg.Dim, trusting: cfg.HoldAll, index: map[int64]int32{}, graph: g, factors: g.AddBetween(), resolved: map[int32][]int64{},
		datum: lie.Identity(), chain: evidence.NewChain(cfg.Dim), markOf: map[string]int32{},
	}
	if cfg.Dim == 3 {
		s.level = cfg.Level
	}
	return s
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
	s.byTime = slices.Insert(s.byTime, s.until(k.StampNS, true), int32(n))
	s.leaving = append(s.leaving, -1)
	s.graph.Values.Poses = append(s.graph.Values.Poses, pose)
	s.dirty = true
	s.arrive(k.StampNS, k.StampNS)
	return nil
}

func (s *session) addRelative(r *Relative) error {
	i, ok := s.index[r.From]
	j, found := s.index[r.To]
	if !ok || !found || i == j {
		return fmt.Errorf("relative pose from %d to %d of session %d: two known keyframes expected", r.From, r.To, s.id)
	}
	if err := checkMeasurement(&r.Z, &r.Info, s.dim); err != nil {
		return fmt.Errorf("relative pose from %d to %d of session %d: %w", r.From, r.To, s.id, err)
	}
	s.factors.Add(i, j, r.Z, &r.Info)
	s.dirty = true
	if r.Closure && !s.trusting && s.place[i] >= 0 && s.place[j] >= 0 {
		s.older = append(s.older, -1)
		s.doubt(int32(s.factors.Len() - 1))
		return nil
	}
	s.leave(i)
	if !r.Closure {
		s.odometry(i, j, r)
	}
	s.arrive(s.stamps[i], s.stamps[j])
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

// optimise brings the session to its own optimum, starting from its present poses. When these explain the relative poses badly,
// as a front end's first guess may, it also tries the chordal start and keeps the better of the two.
func (s *session) optimise() error {
	s.judge()
	s.solved = s.measured()
	if s.factors.Len() > 0 {
		s.tryChordal(s.relatives().Anchors(), nil)
	}
	return s.decide()
}

// measured is the number of measurements.
func (s *session) measured() int { return s.factors.Len() + s.begun }

// refresh brings the map up to date with measurements that no summary has asked about yet: with the corrected junctions fixed
// where the base put them, or else to the session's own optimum.
func (s *session) refresh() error {
	if s.joined && s.told != nil {
		s.judge()
		s.enter(false, false)
		return s.settle(s.told.fixed(s))
	}
	if err := s.optimise(); err != nil {
		return err
	}
	if !s.bound() {
		s.dirty = false
	}
	return nil
}

// stale tells whether the map lacks a tenth of its measurements, or any when the robot has settled.
func (s *session) stale(settled bool) bool {
	fresh := s.measured() - s.solved
	return fresh > 0 && (settled || 10*fresh > s.measured())
}

// tryChordal replaces the poses by the chordal start with the given ones fixed, if that lowers the cost; the points that are not
// fixed are placed anew then. It is tried where the measurements are explained badly.
func (s *session) tryChordal(fixed, points []int32) {
	g := s.graph
	cost := g.Cost()
	if !(cost > 2*float64(s.freedom())) {
		return
	}
	poses, places := slices.Clone(g.Values.Poses), slices.Clone(g.Values.Points)
	if posegraph.Chordal(g, fixed) == nil {
		s.replace(points)
		if g.Cost() < cost {
			return
		}
	}
	copy(g.Values.Poses, poses)
	copy(g.Values.Points, places)
}

// freedom is how many numbers the measurements of the graph have.
func (s *session) freedom() int {
	n := s.graph.Dim * s.factors.Len()
	for _, set := range s.graph.Sets[1:] {
		set := set.(*posegraph.Sightings)
		for k := range set.Len() {
			n += set.Freedoms(k)
		}
	}
	return n
}

// condense condenses the session at its present values; closures and sightings that are not held say nothing.
func (s *session) condense() (*partition.Condensed, error) {
	d := s.graph.Dim
	n := s.factors.Len()
	terms := make([]partition.Quadratic, 0, n+s.begun)
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
	terms = s.sightingTerms(terms)
	var separators []int32
	for i, is := range s.separator {
		if is || i == 0 && s.level > 0 {
			separators = append(separators, int32(i))
		}
	}
	for k, m := range s.points {
		if s.marks[m].wanted {
			separators = append(separators, s.graph.Point(int32(k)))
		}
	}
	v := &s.graph.Values
	return partition.CondensePoints(s.graph.Dim, v.Poses, v.Points, terms, separators)
}
