package agent

import (
	"fmt"
	"math"

	"selvage/internal/evidence"
	"selvage/internal/posegraph"
	"selvage/internal/robust"
	"selvage/internal/sparse"
)

// decide brings the session to its own optimum and decides on the way which sightings are believed. Marks that run away, or that the
// believed sightings leave free, drop out until there are more sightings of them.
func (s *session) decide() error {
	for {
		r, err := s.weigh()
		if err != nil {
			return err
		}
		if s.drop(&r) {
			continue
		}
		if r.Stop == posegraph.Undetermined {
			return fmt.Errorf("session %d: the measurements leave keyframe %d free", s.id, s.keys[r.Weakest])
		}
		return nil
	}
}

// weigh solves with all sightings, decides, and solves with those that are believed.
func (s *session) weigh() (posegraph.Result, error) {
	s.enter(true, false)
	if s.misfits() {
		s.enter(true, true)
		rough := posegraph.DefaultOptions()
		rough.Tolerance, rough.MaxIterations = 1e-6, 50
		if r, err := s.judged(robust.Decide, robust.Options{Adjust: rough, FromAll: true}); err != nil || r.Stop == posegraph.Undetermined {
			return r.Result, err
		}
		s.enter(true, false)
		return s.conclude(robust.Decide)
	}
	for i := range s.sightings {
		if e := &s.sightings[i]; e.set != nil && e.refused() {
			e.set.W[e.k] = evidence.Floor
		}
	}
	return s.conclude(robust.Review)
}

type rule func(*posegraph.Graph, *posegraph.Solver, robust.Options) robust.Result

// judged applies a rule to the graph as it stands; where all is trusted or nothing sighted, it only adjusts.
func (s *session) judged(by rule, o robust.Options) (robust.Result, error) {
	if s.trusting || len(s.points) == 0 {
		r, err := s.adjust(o.Adjust)
		return robust.Result{Result: r}, err
	}
	solver, err := posegraph.NewSolver(s.graph, s.graph.Anchors(), sparse.Options{})
	if err != nil {
		return robust.Result{}, err
	}
	return by(s.graph, solver, o), nil
}

// conclude notes what a rule finds, and solves with what it holds.
func (s *session) conclude(by rule) (posegraph.Result, error) {
	o := posegraph.DefaultOptions()
	if s.trusting || len(s.points) == 0 {
		return s.adjust(o)
	}
	near := o
	near.MaxIterations = 50 // there are many rounds, and where one does not come to rest it shows enough of what fits
	r, err := s.judged(by, robust.Options{Adjust: near})
	if err != nil || r.Stop == posegraph.Undetermined {
		return r.Result, err
	}
	var first [posegraph.Position + 1]int // finding of each sense
	for i := len(r.Findings) - 1; i >= 0; i-- {
		first[r.Findings[i].Set.Sense()] = i
	}
	for i := range s.sightings {
		e := &s.sightings[i]
		if e.decided = e.set != nil; e.decided {
			e.finding = r.Findings[first[e.asked.Sense]+e.k]
			e.finding.Set = nil
		}
	}
	if r.Refused == 0 && r.Stop == posegraph.Converged {
		return r.Result, nil
	}
	s.enter(false, false)
	return s.adjust(o)
}

// adjust solves with the first variable of each part fixed.
func (s *session) adjust(o posegraph.Options) (posegraph.Result, error) {
	anchors := s.graph.Anchors()
	if len(anchors) == s.graph.Variables() {
		return posegraph.Result{}, nil
	}
	solver, err := posegraph.NewSolver(s.graph, anchors, sparse.Options{})
	if err != nil {
		return posegraph.Result{}, err
	}
	return solver.Optimise(o), nil
}

// misfits tells whether so many sightings disagree with the map that the map itself is in doubt.
func (s *session) misfits() bool {
	const most = 0.2
	wrong, all := 0, 0
	for i := range s.sightings {
		if e := &s.sightings[i]; e.set != nil && !e.refused() {
			all++
			if e.set.Chi2(e.k, &s.graph.Values) > robust.Limit(e.set.Freedoms(e.k)) {
				wrong++
			}
		}
	}
	return float64(wrong) > most*float64(all)
}

// drop lets marks wait for more sightings that have run away or that an adjustment found to be free, and tells whether there are any.
func (s *session) drop(r *posegraph.Result) (some bool) {
	poses := len(s.graph.Values.Poses)
	for k, m := range s.points {
		lost := r.Stop == posegraph.Undetermined && int(r.Weakest) == poses+k
		for _, x := range s.graph.Values.Points[k] {
			lost = lost || !(math.Abs(x) <= farthest)
		}
		if lost {
			s.marks[m].adrift = s.marks[m].seen
			some = true
		}
	}
	return some
}

// doubts tells whether there are sightings in the graph that were not decided on, and which were.
func (s *session) doubts() (keep func(set *posegraph.Sightings, k int) bool, some bool) {
	if s.trusting {
		return nil, false
	}
	kept := map[*posegraph.Sightings][]bool{}
	for i := range s.sightings {
		e := &s.sightings[i]
		if e.set == nil {
			continue
		}
		if kept[e.set] == nil {
			kept[e.set] = make([]bool, e.set.Len())
		}
		kept[e.set][e.k] = e.decided
		some = some || !e.decided
	}
	return func(set *posegraph.Sightings, k int) bool { return kept[set][k] }, some
}
