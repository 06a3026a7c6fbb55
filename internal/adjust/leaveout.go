package adjust

import (
	"fmt"
	"slices"

	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// LeaveOut takes the sightings that [Problem.SolveRobust] has cut off out of the graph, and with them what then determines nothing any
// more: marks that the others do not place, and sightings between own maps that these do not hold rigidly to each other. Islands and
// anchors are found anew; values stay. The problem wants to be analysed and solved again, with [Problem.Solve].
func (p *Problem) LeaveOut() error {
	for i := range p.sights {
		e := &p.sights[i]
		e.out = e.Set == nil || e.Set.W[e.K] < 0.5
	}
	for {
		if err := p.reenter(p.Rigidity().Islands(nil), nil); err != nil {
			return err
		}
		lost := 0
		for i := range p.sights {
			if e := &p.sights[i]; !e.out && e.Set == nil {
				e.out = true
				lost++
			}
		}
		if lost == 0 {
			return nil
		}
	}
}

// Release takes the coordinates of control points, as numbered in the survey, out of the adjustment, and puts all sightings within the islands back: to be
// solved robustly again.
func (p *Problem) Release(control []int) error {
	p.released = make([]bool, len(p.marks))
	for _, m := range control {
		p.released[m] = true
	}
	return p.reenter(p.Island[:len(p.Keys)], control)
}

// Controls returns the control points in the graph, nil without any, and the mark of each.
func (p *Problem) Controls() (priors *posegraph.PointPriors, mark []int) {
	for _, set := range p.Graph.Sets {
		if c, ok := set.(*posegraph.PointPriors); ok {
			priors = c
			for k := range c.Len() {
				mark = append(mark, p.Points[c.Point(k)].Mark)
			}
		}
	}
	return priors, mark
}

// reenter is connect with the points where they are, but for marks that are to be placed afresh.
func (p *Problem) reenter(label []int32, fresh []int) error {
	places := make(map[int][3]float64, len(p.sights))
	for i := range p.sights {
		if e := &p.sights[i]; e.Set != nil && e.to < 0 && !slices.Contains(fresh, int(e.mark)) {
			places[i] = p.Graph.Values.Points[e.Set.To[e.K]]
		}
	}
	p.connect(slices.Clone(label), false)
	for i := range p.sights {
		e := &p.sights[i]
		if at, known := places[i]; known && e.Set != nil {
			p.Graph.Values.Points[e.Set.To[e.K]] = at
		}
	}
	return p.control(false)
}

// Outside makes a sighting of tie k, which is less than a pose and need not be held, between its ends, in a set of its own.
func (p *Problem) Outside(s *survey.Survey, k int) (*posegraph.Sightings, error) {
	one := Problem{Graph: p.Graph}
	if err := one.addEncounter(s, k, p.Ends[k][0], p.Ends[k][1]); err != nil {
		return nil, fmt.Errorf("tie %s: %w", s.Ties[k].ID, err)
	}
	return one.sights[0].alone(p.Graph), nil
}

// SenseOf returns what a kind of sight tells; it panics on whole poses.
func SenseOf(kind survey.Kind) posegraph.Sense {
	sense, ok := senses[kind]
	if !ok {
		panic("adjust: a whole pose is no sight")
	}
	return sense
}
