package adjust

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/robust"
	"selvage/internal/sparse"
	"selvage/internal/survey"
)

// whole returns the graph without sightings, its poses shared; it is for looking and for starts, and has slots of its own.
func (p *Problem) whole() *posegraph.Graph {
	g := posegraph.New(p.Graph.Dim, p.Graph.Values.Poses)
	own := *p.Factors
	g.Sets = append(g.Sets, &own)
	return g
}

// beginSighted makes the start in steps: the poses of each body by its relative poses; each body's own map, with its marks; the frames
// of the bodies from what they saw of each other and from marks that several saw; the datum from control points. What
// cannot be joined is left an island, and sightings across islands are left out. Given poses are taken as they are.
func (p *Problem) beginSighted(start Start) error {
	whole := p.whole()
	body, count := whole.Components()
	anchors := whole.Anchors()
	switch start {
	case Auto:
		given := append([]lie.SE3(nil), whole.Values.Poses...)
		if posegraph.Chordal(whole, anchors) != nil {
			copy(whole.Values.Poses, given)
			posegraph.SpanningTree(whole, anchors)
		}
	case Chordal:
		if err := posegraph.Chordal(whole, anchors); err != nil {
			return err
		}
	case Tree:
		posegraph.SpanningTree(whole, anchors)
	case Given:
		p.connect(nil, false)
		return p.control(false)
	default:
		return fmt.Errorf("start %q: expected auto, chordal, tree or given", start)
	}
	copy(p.Graph.Values.Poses, whole.Values.Poses)
	glimpses, err := p.ownMaps(body)
	if err != nil {
		return err
	}
	p.body = slices.Clone(body)
	if count > 1 {
		frames := evidence.Frames(count, p.Graph.Dim == 3, glimpses, evidence.DefaultFrameOptions())
		for v, b := range body {
			p.Graph.Values.Poses[v] = frames[b].Pose.Mul(p.Graph.Values.Poses[v])
			body[v] = int32(frames[b].Group)
		}
	}
	p.own = slices.Clone(p.Graph.Values.Poses)
	for _, coarse := range [2]bool{true, false} {
		p.reconnect(body, coarse)
		p.erect()
		if err := p.control(coarse); err != nil {
			return err
		}
		if coarse {
			p.grow()
			if _, err := p.rough(true); err != nil {
				return err
			}
		}
	}
	return nil
}

// reconnect is connect; after the coarse stage the points stay where that has brought them.
func (p *Problem) reconnect(body []int32, coarse bool) {
	before, places := p.Points, p.Graph.Values.Points
	p.connect(body, coarse)
	if !coarse && slices.Equal(before, p.Points) {
		copy(p.Graph.Values.Points, places)
	}
}

// rough adjusts robustly, well enough for a start.
func (p *Problem) rough(fromAll bool) (*posegraph.Solver, error) {
	s, err := posegraph.NewSolver(p.Graph, p.Anchors, sparse.Options{})
	if err != nil {
		return nil, err
	}
	o := posegraph.DefaultOptions()
	o.Tolerance, o.MaxIterations = 1e-6, 50
	robust.Decide(p.Graph, s, robust.Options{Adjust: o, FromAll: fromAll})
	return s, nil
}

// ownMaps adjusts every body by itself, without what it saw of others and with marks of its own, and returns what bodies know of
// each other's frames thereafter.
func (p *Problem) ownMaps(body []int32) ([]evidence.Glimpse, error) {
	var s *posegraph.Solver
	for _, coarse := range [2]bool{true, false} {
		p.reconnect(body, coarse)
		var err error
		if s, err = p.rough(coarse); err != nil {
			return nil, err
		}
	}
	spread := func(v int32) float64 { return 0 }
	if sigma, err := s.Covariance(); err == nil {
		spread = func(v int32) float64 { // variance of the place of a variable in the frame of its body
			if m := sigma.Of(v); m != nil {
				return m[0] + m[1+int(math.Sqrt(float64(len(m))))]
			}
			return 0
		}
	}
	return p.glimpses(body, spread), nil
}

// glimpses collects what pairs of bodies know of each other's frames: spots on robots that were seen, and marks that both have seen.
func (p *Problem) glimpses(body []int32, spread func(v int32) float64) []evidence.Glimpse {
	// Errors of a camera vary slowly, and those of a map are in the drift only as far as they grow: sigmas count twofold.
	const slow = 4
	g := p.Graph
	var out []evidence.Glimpse
	type seen struct {
		body  int32
		place [3]float64
		own   float64
	}
	marks := map[int32][]seen{}
	done := make([]bool, len(p.Points))
	for i := range p.sights {
		e := &p.sights[i]
		if e.to >= 0 && body[e.from] == body[e.to] {
			continue
		}
		one := e.alone(g)
		place, whole := one.Place(0)
		if !whole {
			continue
		}
		from := g.Values.Poses[e.from]
		if e.to >= 0 {
			out = append(out, evidence.Glimpse{A: int(body[e.from]), B: int(body[e.to]), InA: from.Apply(place),
				InB: g.Values.Poses[e.to].Apply(e.spot), Sigma: math.Sqrt(slow * variance(one)), Drift: spread(e.from) + spread(e.to)})
			continue
		}
		point := e.Set.To[e.K]
		if done[point] || e.Set.W[e.K] < 0.5 {
			continue
		}
		done[point] = true
		here := seen{body[e.from], g.Values.Points[point], spread(g.Point(point)) + variance(one)}
		for _, other := range marks[e.mark] {
			out = append(out, evidence.Glimpse{A: int(other.body), B: int(here.body), InA: other.place, InB: here.place,
				Sigma: math.Sqrt(slow * (other.own + here.own))})
		}
		marks[e.mark] = append(marks[e.mark], here)
	}
	return out
}

// alone returns the sighting in a set of its own.
func (e *sighted) alone(g *posegraph.Graph) *posegraph.Sightings {
	apart := posegraph.New(g.Dim, nil)
	s := apart.AddEncounters(e.sense)
	s.Add(e.from, e.to, e.mount, e.spot, e.z, &e.info)
	return s
}

// variance returns that of the place that a sighting measured, the mean over the directions.
func variance(one *posegraph.Sightings) float64 {
	info, z := one.Info(0), one.Z[0]
	sum, n := 0.0, 0.0
	for i := range 3 {
		if d := info[4*i]; d > 0 {
			v := 1 / d
			if one.Sense() == posegraph.RangeBearing && i > 0 {
				v *= z[0] * z[0]
			}
			sum += v
			n++
		}
	}
	return sum / n
}

// control enters control points where they hold an island and, if wanted, moves it to the datum.
func (p *Problem) control(move bool) error {
	g := p.Graph
	var free []bool
	p.Anchors, free = p.priors(g)
	for island := range free {
		if !free[island] && move {
			if err := p.toDatum(int32(island)); err != nil {
				return err
			}
		}
	}
	return nil
}

// priors enters the control points into a graph with the points of the problem, but for islands that they would not hold. It returns
// the anchors of these and which they are.
func (p *Problem) priors(g *posegraph.Graph) (anchors []int32, free []bool) {
	priors := g.AddPointPriors()
	for k := range p.Points {
		m := &p.marks[p.Points[k].Mark]
		if p.Apart || m.Role != survey.ControlPoint || p.released != nil && p.released[p.Points[k].Mark] {
			continue
		}
		var info lie.Mat3
		for i, s := range m.Sigma {
			if !math.IsInf(s, 1) {
				info[4*i] = 1 / (s * s)
			}
		}
		priors.Add(int32(k), m.T, &info)
	}
	island, count := g.Components()
	anchors, free = g.Anchors(), make([]bool, count)
	if g == p.Graph {
		anchors = p.anchors(g)
	}
	for _, v := range anchors {
		free[island[v]] = true
	}
	priors.Keep(func(k int32) bool { return !free[island[g.Point(k)]] })
	return anchors, free
}

// toDatum moves an island so that its control points come to their known places as nearly as may be.
func (p *Problem) toDatum(island int32) error {
	g := p.Graph
	var from, to [][3]float64
	for k := range p.Points {
		if m := &p.marks[p.Points[k].Mark]; p.Points[k].Island == island && m.Role == survey.ControlPoint {
			from, to = append(from, g.Values.Points[k]), append(to, m.T)
		}
	}
	flat := g.Dim == 3
	if up, ok := p.uprightBy(island); ok {
		p.move(island, &up)
		for k := range from {
			from[k] = up.Apply(from[k])
		}
		flat = true
	}
	move, ok := lie.FitPoints(flat, from, to, nil)
	if !ok {
		return fmt.Errorf("the control points lie so close or so much in line that they leave the map free to turn")
	}
	p.move(island, &move)
	return nil
}

// move moves an island as a whole.
func (p *Problem) move(island int32, by *lie.SE3) {
	v := &p.Graph.Values
	for i := range v.Poses {
		if p.Island[i] == island {
			v.Poses[i] = by.Mul(v.Poses[i])
		}
	}
	for k := range p.Points {
		if p.Points[k].Island == island {
			v.Points[k] = by.Apply(v.Points[k])
		}
	}
}

// FramesOnly finds the frames of the robots with their own maps frozen, as [Problem.Begin] made them: the unknowns are one pose for each
// session (what whole relative poses hold together) and the marks that several have seen. Sigmas of sightings count twofold,
// for the maps are not free of error. The poses of the problem are set; there are no covariances. A problem without sightings, or
// begun with given poses, has no such maps: an error says so.
func (p *Problem) FramesOnly(o posegraph.Options) (posegraph.Result, error) {
	if p.own == nil {
		return posegraph.Result{}, errors.New("frames only: there are no own maps, for nothing was sighted or the start was given")
	}
	body, count := p.body, 0
	for _, b := range body {
		count = max(count, int(b)+1)
	}
	poses := slices.Repeat([]lie.SE3{lie.Identity()}, count)
	g := posegraph.New(p.Graph.Dim, poses)
	g.Values.Points = append(g.Values.Points, p.Graph.Values.Points...)
	sets := sets{graph: g}
	for i := range p.sights {
		e := &p.sights[i]
		if e.Set == nil || e.to >= 0 && body[e.from] == body[e.to] {
			continue
		}
		info := e.info
		for c := range info {
			info[c] /= 4
		}
		to, spot := e.Set.To[e.K], e.spot
		if e.to >= 0 {
			to, spot = body[e.to], p.own[e.to].Apply(spot)
		}
		sets.of(e.sense, e.to < 0).Add(body[e.from], to, p.own[e.from].Mul(e.mount), spot, e.z, &info)
	}
	anchors, _ := p.priors(g)
	s, err := posegraph.NewSolver(g, anchors, sparse.Options{})
	if err != nil {
		return posegraph.Result{}, err
	}
	result := robust.Decide(g, s, robust.Options{Adjust: o}).Result
	for v, b := range body {
		p.Graph.Values.Poses[v] = g.Values.Poses[b].Mul(p.own[v])
	}
	copy(p.Graph.Values.Points, g.Values.Points)
	return result, nil
}
