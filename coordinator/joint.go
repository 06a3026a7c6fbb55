package coordinator

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
)

// joint is the joint problem over the junctions of all joined units.
type joint struct {
	n       *network
	graph   *posegraph.Graph
	cliques *posegraph.Cliques
	ties    *posegraph.Between
	sights  [posegraph.Position + 1]*posegraph.Sightings // of robots, by sense; nil for those that have none
	marks   *posegraph.MarkCliques                       // nil without marks
	factor  []int                                        // usable tie -> factor of its batch, -1 when it has no say here

	priors   *posegraph.PointPriors // of the control points; nil where they hold nothing
	points   []point
	pointsOf [][]int32 // unit -> its points
	solver   *posegraph.Solver
	anchors  []int32
	islands  []island              // per number of weighed.island; born 0 for units that stand alone
	member   []int                 // unit -> island number
	start    posegraph.Values      // values it began with
	sigma    *posegraph.Covariance // at the present values, on demand
}

// acceptance is the probability with which a true tie stays below the limit of the tests on the joint solution.
const acceptance = 0.99

// hopeless is how many times over the limit a refused tie must be to be left out of the joint problem. False ties join distant
// places: with a third of them in the pattern, a fleet of 30 took three times as long.
const hopeless = 10

// solve weighs the ties, solves the joint problem and returns corrections and verdicts of the new epoch.
func (c *Coordinator) solve() ([]Publish, error) {
	n := c.layout()
	if len(n.units) == 0 {
		return nil, nil
	}
	w := c.weigh(n)
	for {
		j, err := c.pose(n, &w)
		if err != nil {
			return nil, err
		}
		err = c.settle(j, &w)
		if err == nil {
			_, err = j.covariance()
		}
		var loose *looseError
		switch {
		case errors.As(err, &loose): // each time with one unit more that does not hold together
			n.blame(loose)
			w = c.weigh(n)
		case errors.Is(err, errParted): // each time with fewer ties held
			w.island = w.islands(n)
		case err != nil:
			return nil, err
		default:
			if err := c.weighRulings(j, &w); err != nil {
				return nil, err
			}
			return c.publish(j)
		}
	}
}

// looseError: a summary leaves one of its junctions free.
type looseError struct {
	variable int32
	unit     int // that it belongs to
}

// freed says that a variable is left free.
func (j *joint) freed(variable int32) *looseError {
	if k := int(variable) - len(j.graph.Values.Poses); k >= 0 {
		return &looseError{variable, j.points[k].units[0]}
	}
	return &looseError{variable, j.n.unitOf(variable)}
}

func (e *looseError) Error() string {
	return fmt.Sprintf("joint solution: junction %d of the network is left free by its summary", e.variable)
}

// loose names the variable whose pivot a factorisation lost.
func (j *joint) loose(err error) error {
	var bad *sparse.NotPositiveError
	if !errors.As(err, &bad) {
		return err
	}
	fixed := make([]bool, j.graph.Variables())
	for _, v := range j.anchors {
		fixed[v] = true
	}
	row := -1 // of the matrix: one for each variable that is not fixed
	for v := range fixed {
		if !fixed[v] {
			row++
		}
		if row == bad.Block {
			return j.freed(int32(v))
		}
	}
	return err
}

// blame marks the units whose summaries do not hold together by themselves; when all do, the one that the solution could not place.
func (n *network) blame(loose *looseError) {
	found := false
	for u := range n.units {
		if m := n.units[u].model; m.err == nil && !n.units[u].sound(n.dim) {
			m.err, found = loose, true
		}
	}
	if !found {
		n.units[loose.unit].model.err = loose
	}
}

// sound tells whether the summary of u determines its junctions by itself, each part for itself.
func (u *unit) sound(dim int) bool {
	g := u.alone(dim)
	solver, err := posegraph.NewSolver(g, g.Anchors(), sparse.Options{})
	if err != nil {
		return false
	}
	_, err = solver.Covariance()
	return err == nil
}

// errParted: the ties given up were all that connected some units.
var errParted = errors.New("an island fell apart")

// pose lays the joint problem out and gives it starting values: those of the candidate with the lowest cost.
func (c *Coordinator) pose(n *network, w *weighed) (*joint, error) {
	j := &joint{n: n, member: w.island, factor: make([]int, len(n.ties))}
	last := n.units[len(n.units)-1]
	j.graph = posegraph.New(c.width(), make([]lie.SE3, int(last.base)+len(last.part.Junctions)))
	j.cliques, j.ties = j.graph.AddCliques(), j.graph.AddBetween()
	size := map[int]int{}
	for _, m := range w.island {
		size[m]++
	}
	j.addPoints(w)
	if len(j.points) > 0 {
		j.marks = j.graph.AddMarkCliques()
	}
	for u := range n.units {
		n.units[u].cliques(j.cliques, n.units[u].base)
		if j.marks != nil {
			addMarkCliques(n.units[u].part, n.units[u].model.poses, j.marks, n.units[u].base, j.pointsOf[u])
		}
	}
	for i := range n.ties {
		t := &n.ties[i]
		j.factor[i] = -1
		if w.island[t.from] != w.island[t.to] {
			if t.finding.Verdict == msgs.Refused && t.ruled == nil {
				t.judge(msgs.Open, c.unjoined(n, i), t.finding.Evidence)
			}
			if t.sight != nil && w.held[i] { // its island fell apart
				w.held[i] = false
				t.judge(msgs.Open, t.sight.alone(), t.finding.Evidence)
			}
			continue
		}
		if t.sight != nil && (t.wild() || n.loose(i) || t.ruledOut()) {
			continue
		}
		if !w.held[i] && !t.regular && t.sight == nil { // no test of fewer components than a pose has
			continue
		}
		if !w.held[i] && t.finding.Verdict == msgs.Refused && t.finding.Statistic > hopeless*c.limit {
			continue
		}
		j.add(i, n.units[t.from].base+int32(t.fromNode), n.units[t.to].base+int32(t.toNode))
		if !w.held[i] {
			j.setWeight(i, 0)
		}
	}
	c.addControl(j, w)
	c.chooseDatums(j, w, size)
	j.addLevels()
	j.anchorStrays()
	best, bestCost := posegraph.Values{}, math.Inf(1)
	for i, candidate := range []func(*joint, *weighed) bool{c.startFromLast, startFromEvidence, c.startFromTies} {
		if !candidate(j, w) {
			continue
		}
		j.placePoints()
		if i == 0 {
			c.recall(j)
		}
		if cost := j.graph.Cost(); best.Poses == nil || cost < bestCost {
			best.Poses, best.Points = append(best.Poses[:0], j.graph.Values.Poses...), append(best.Points[:0], j.graph.Values.Points...)
			bestCost = cost
		}
	}
	j.put(&best)
	j.start = best
	var err error
	j.solver, err = posegraph.NewSolver(j.graph, j.anchors, sparse.Options{})
	return j, err
}

// chooseDatums gives every island of more than one unit its datum: that of the oldest among its units' datums, or a new one on
// the lowest unit. One junction is fixed for each island; every junction of a unit that stands alone is fixed where it is.
func (c *Coordinator) chooseDatums(j *joint, w *weighed, size map[int]int) {
	j.islands = make([]island, len(size))
	lowest := make([]int, len(size))
	for u := len(j.n.units) - 1; u >= 0; u-- {
		lowest[w.island[u]] = u
	}
	number := map[unitID]int{}
	for u := range j.n.units {
		number[j.n.units[u].id] = u
		m := w.island[u]
		p, placed := c.places[j.n.units[u].id]
		if size[m] > 1 && placed && p.joined && !p.island.control && (j.islands[m].born == 0 || p.island.born < j.islands[m].born) {
			j.islands[m] = p.island
		}
	}
	for m := range j.islands {
		u := &j.n.units[lowest[m]]
		if m == w.control {
			j.islands[m] = island{born: controlBorn, control: true, level: c.cfg.LevelDatum}
			continue
		}
		if size[m] < 2 {
			continue
		}
		if i := &j.islands[m]; i.born != 0 {
			if a, known := number[i.anchor]; known && w.island[a] == m {
				u = &j.n.units[a]
			}
		}
		node, found := u.find(j.islands[m].key)
		if i := &j.islands[m]; i.born == 0 || i.anchor != u.id || !found || !u.model.inMain(node) { // a new datum, or its junction is gone
			if i.born == 0 {
				u = j.upright(w, m, u)
			}
			node = slices.Index(u.model.part, u.model.main)
			if i.born == 0 {
				c.datums++
				i.born = c.datums
				if at, ok := u.levelled(); ok {
					node, i.level = at, true
				}
				i.pose = u.model.poses[node]
				if up, ok := u.vertical(); ok {
					i.pose = lie.SE3{R: uprighted(up)}.Mul(i.pose)
				}
			} else if p, ok := c.places[u.id]; ok && len(p.poses) > 0 {
				node, i.pose = u.heir(&p, node)
			}
			i.anchor, i.key = u.id, u.part.Junctions[node].ID
		}
		j.anchors = append(j.anchors, u.base+int32(node))
	}
	for u := range j.n.units {
		if size[w.island[u]] < 2 && w.island[u] != w.control {
			for k := range j.n.units[u].part.Junctions {
				j.anchors = append(j.anchors, j.n.units[u].base+int32(k))
			}
			for _, k := range j.pointsOf[u] {
				j.anchors = append(j.anchors, j.graph.Point(k))
			}
		}
	}
}

// upright returns the lowest unit of an island that knows the vertical, or else the one given.
func (j *joint) upright(w *weighed, island int, otherwise *unit) *unit {
	for u := range j.n.units {
		if _, ok := j.n.units[u].levelled(); ok && w.island[u] == island {
			return &j.n.units[u]
		}
	}
	return otherwise
}

// levelled returns the first junction of the main part whose vertical is known.
func (u *unit) levelled() (junction int, ok bool) {
	for i := range u.part.Levels {
		if u.model.inMain(u.part.Levels[i].Node) {
			return u.part.Levels[i].Node, true
		}
	}
	return 0, false
}

// addLevels enters what the robots know of the vertical, in datums that are level.
func (j *joint) addLevels() {
	var set *posegraph.Levels
	for u := range j.n.units {
		unit := &j.n.units[u]
		if len(unit.part.Levels) == 0 || !j.islands[j.member[u]].level {
			continue
		}
		if set == nil {
			set = j.graph.AddLevels()
		}
		for i := range unit.part.Levels {
			l := &unit.part.Levels[i]
			set.Add(unit.base+int32(l.Node), l.Up, l.Sigma)
		}
	}
}

// heir returns the first junction of the main part that the last solution placed, and where; without one it is the given junction, where
// the frame has it.
func (u *unit) heir(p *placement, otherwise int) (junction int, pose lie.SE3) {
	for k := range u.part.Junctions {
		if at, ok := slices.BinarySearch(p.ids, u.part.Junctions[k].ID); ok && u.model.inMain(k) {
			return k, p.poses[at]
		}
	}
	return otherwise, p.datum.Mul(u.model.poses[otherwise])
}

// anchorStrays fixes one junction of every part of a summary that is connected with nothing: it stays where it starts.
func (j *joint) anchorStrays() {
	component, count := j.graph.Components()
	held := make([]bool, count)
	for _, v := range j.anchors {
		held[component[v]] = true
	}
	for _, v := range j.graph.Anchors() { // none where control marks hold it
		if !held[component[v]] {
			j.anchors = append(j.anchors, v)
		}
	}
}

func (u *unit) find(key int64) (int, bool) {
	for k := range u.part.Junctions {
		if u.part.Junctions[k].ID == key {
			return k, true
		}
	}
	return 0, false
}

// settle solves the joint problem. Unless all ties are held, ties that stand out are given up by graduated non-convexity, all
// others within an island are tested against the prediction of those held, and those that pass are taken back.
func (c *Coordinator) settle(j *joint, w *weighed) error {
	if c.cfg.HoldAll || len(j.anchors) == j.graph.Variables() {
		return c.finish(j)
	}
	for round := 0; round < 2; round++ {
		if err := c.giveUp(j, w); err != nil {
			return err
		}
		if err := c.finish(j); err != nil {
			return err
		}
		readmitted, err := c.test(j, w)
		if err != nil || !readmitted {
			return err
		}
	}
	if err := c.giveUp(j, w); err != nil {
		return err
	}
	return c.finish(j)
}

// covariance returns the covariance blocks at the solution.
func (j *joint) covariance() (posegraph.Covariance, error) {
	if j.sigma == nil {
		sigma, err := j.solver.Covariance()
		if err != nil {
			return sigma, j.loose(err)
		}
		j.sigma = &sigma
	}
	return *j.sigma, nil
}

// giveUp runs graduated non-convexity over the held ties and drops those it decides against. What a person has ruled held is true:
// it keeps its weight, and what contradicts it goes.
func (c *Coordinator) giveUp(j *joint, w *weighed) error {
	limit := c.limit
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-6
	var active []int
	for i := range j.n.ties {
		if w.held[i] && j.factor[i] >= 0 && j.n.ties[i].ruled == nil {
			active = append(active, i)
		}
	}
	squared, weights := make([]float64, len(active)), make([]float64, len(active)) // the squares in shares of the limit of a whole pose
	whole := func(i int) float64 {
		if s := j.n.ties[i].sight; s != nil {
			return limit / s.limit()
		}
		return 1
	}
	measure := func() {
		for k, i := range active {
			squared[k] = j.chi2(i) * whole(i)
		}
	}
	if err := j.optimise(o); err != nil {
		return err
	}
	measure()
	schedule, needed := evidence.NewSchedule(limit, squared)
	for decided := !needed; !decided; {
		decided = schedule.Next(weights, squared)
		for k, i := range active {
			j.setWeight(i, weights[k])
		}
		if err := j.optimise(o); err != nil {
			return err
		}
		measure()
	}
	for k, i := range active {
		w.held[i] = !needed || weights[k] == 1
		j.setWeight(i, 0)
		if w.held[i] {
			j.setWeight(i, 1)
			continue
		}
		e := msgs.Evidence{Statistic: squared[k] / whole(i)}
		e.Limit, e.DoF = c.limitOf(j.n.ties[i].tie)
		j.n.ties[i].judge(msgs.Refused, fmt.Sprintf("contradicts the joint solution: misclosure %.1f, limit %.1f", e.Statistic, e.Limit), e)
	}
	return j.keepTogether(w)
}

// keepTogether checks that the held ties still connect every island.
func (j *joint) keepTogether(w *weighed) error {
	now := w.islands(j.n)
	for u := range now {
		for v := range now {
			if w.island[u] == w.island[v] && now[u] != now[v] {
				return errParted
			}
		}
	}
	return nil
}

// test compares every tie of an island that is not held with what the others predict, and holds those that agree.
func (c *Coordinator) test(j *joint, w *weighed) (readmitted bool, err error) {
	var idle []int
	for i := range j.n.ties {
		if j.factor[i] >= 0 && !w.held[i] && j.n.ties[i].ruled == nil {
			idle = append(idle, i)
		}
	}
	if len(idle) == 0 {
		return false, nil
	}
	sigma, err := j.covariance()
	if err != nil {
		return false, err
	}
	for _, i := range idle {
		chi2 := j.innovation(i, sigma)
		limit, dof := c.limitOf(j.n.ties[i].tie)
		e := msgs.Evidence{Statistic: chi2, DoF: dof, Limit: limit}
		if chi2 < limit {
			w.held[i] = true
			j.setWeight(i, 1)
			j.n.ties[i].judge(msgs.Held, fmt.Sprintf("agrees with what the other ties predict: misclosure %.1f, limit %.1f", chi2, limit), e)
			readmitted = true
			continue
		}
		j.n.ties[i].judge(msgs.Refused, fmt.Sprintf("contradicts what the other ties predict: misclosure %.1f, limit %.1f", chi2, limit), e)
	}
	return readmitted, nil
}
