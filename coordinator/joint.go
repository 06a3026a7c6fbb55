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
	factor  []int // usable tie -> factor, -1 when it has no say here
	solver  *posegraph.Solver
	anchors []int32
	islands []island              // per number of weighed.island; born 0 for units that stand alone
	member  []int                 // unit -> island number
	start   []lie.SE3             // values it began with
	sigma   *posegraph.Covariance // at the present values, on demand
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
			w.island = n.islands(w.held)
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
type looseError struct{ variable int32 }

func (e *looseError) Error() string {
	return fmt.Sprintf("joint solution: junction %d of the network is left free by its summary", e.variable)
}

// loose names the variable whose pivot a factorisation lost.
func (j *joint) loose(err error) error {
	var bad *sparse.NotPositiveError
	if !errors.As(err, &bad) {
		return err
	}
	fixed := make([]bool, len(j.graph.Values.Poses))
	for _, v := range j.anchors {
		fixed[v] = true
	}
	row := -1 // of the matrix: one for each variable that is not fixed
	for v := range fixed {
		if !fixed[v] {
			row++
		}
		if row == bad.Block {
			return &looseError{int32(v)}
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
		n.units[n.unitOf(loose.variable)].model.err = loose
	}
}

// sound tells whether the summary of u determines its junctions by itself, each part for itself.
func (u *unit) sound(dim int) bool {
	g := posegraph.New(dim, slices.Clone(u.model.poses))
	u.cliques(g.AddCliques(), 0)
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
	for u := range n.units {
		n.units[u].cliques(j.cliques, n.units[u].base)
	}
	for i := range n.ties {
		t := &n.ties[i]
		j.factor[i] = -1
		if w.island[t.from] != w.island[t.to] {
			if t.finding.Verdict == msgs.Refused && t.ruled == nil {
				t.judge(msgs.Open, "nothing held connects its two robots", t.finding.Evidence)
			}
			continue
		}
		if !w.held[i] && !t.regular { // no test of fewer components than a pose has
			continue
		}
		if !w.held[i] && t.finding.Verdict == msgs.Refused && t.finding.Statistic > hopeless*c.limit {
			continue
		}
		j.factor[i] = j.ties.Len()
		j.ties.Add(n.units[t.from].base+int32(t.fromNode), n.units[t.to].base+int32(t.toNode), t.z, &t.info)
		if !w.held[i] {
			j.ties.W[j.factor[i]] = 0
		}
	}
	c.chooseDatums(j, w, size)
	j.anchorStrays()
	best, bestCost := []lie.SE3(nil), math.Inf(1)
	for _, candidate := range []func(*joint, *weighed) bool{c.startFromLast, startFromEvidence, c.startFromTies} {
		if !candidate(j, w) {
			continue
		}
		if cost := j.graph.Cost(); best == nil || cost < bestCost {
			best, bestCost = append(best[:0], j.graph.Values.Poses...), cost
		}
	}
	copy(j.graph.Values.Poses, best)
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
		if size[m] > 1 && placed && p.joined && (j.islands[m].born == 0 || p.island.born < j.islands[m].born) {
			j.islands[m] = p.island
		}
	}
	for m := range j.islands {
		u := &j.n.units[lowest[m]]
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
			node = slices.Index(u.model.part, u.model.main)
			if i.born == 0 {
				c.datums++
				i.born = c.datums
				i.pose = u.model.poses[node]
			} else if p, ok := c.places[u.id]; ok && len(p.poses) > 0 {
				node, i.pose = u.heir(&p, node)
			}
			i.anchor, i.key = u.id, u.part.Junctions[node].ID
		}
		j.anchors = append(j.anchors, u.base+int32(node))
	}
	for u := range j.n.units {
		if size[w.island[u]] < 2 {
			for k := range j.n.units[u].part.Junctions {
				j.anchors = append(j.anchors, j.n.units[u].base+int32(k))
			}
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
	for v, k := range component {
		if !held[k] {
			held[k] = true
			j.anchors = append(j.anchors, int32(v))
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

// place writes the poses of unit u for the frame at datum.
func (j *joint) place(u int, datum lie.SE3) {
	unit := &j.n.units[u]
	for k, x := range unit.model.poses {
		y := datum.Mul(x)
		if j.graph.Dim == 3 {
			y = lie.Planar(&y).Spatial()
		}
		j.graph.Values.Poses[int(unit.base)+k] = y
	}
}

// pin puts every island's fixed junction exactly where its datum has it, moving the island along.
func (j *joint) pin() {
	for u := range j.n.units {
		m := j.member[u]
		i := &j.islands[m]
		if i.born == 0 || i.anchor != j.n.units[u].id {
			continue
		}
		node, _ := j.n.units[u].find(i.key)
		at := int(j.n.units[u].base) + node
		move := i.pose.Mul(j.graph.Values.Poses[at].Inv())
		for v := range j.n.units {
			if j.member[v] != m {
				continue
			}
			for k := range j.n.units[v].model.poses {
				x := &j.graph.Values.Poses[int(j.n.units[v].base)+k]
				*x = move.Mul(*x)
				if j.graph.Dim == 3 {
					*x = lie.Planar(x).Spatial()
				}
			}
		}
		j.graph.Values.Poses[at] = i.pose
	}
}

// startFromLast starts every unit where the last solution put it; every joined unit must have been there.
func (c *Coordinator) startFromLast(j *joint, w *weighed) bool {
	for u := range j.n.units {
		unit := &j.n.units[u]
		p, ok := c.places[unit.id]
		if j.islands[j.member[u]].born == 0 {
			j.place(u, lie.Identity())
			continue
		}
		if !ok || !p.joined || p.island.born != j.islands[j.member[u]].born {
			return false
		}
		var from, to []lie.SE3
		for k, id := range p.ids {
			if v, found := unit.find(id); found {
				from, to = append(from, unit.model.poses[v]), append(to, p.poses[k])
			}
		}
		if len(from) == 0 {
			return false
		}
		j.place(u, lie.Align(from, to))
	}
	j.pin()
	return true
}

// startFromEvidence starts every unit where the evidence put its frame.
func startFromEvidence(j *joint, w *weighed) bool {
	if w.start == nil {
		return false
	}
	for u := range j.n.units {
		j.place(u, w.start[u])
	}
	j.pin()
	return true
}

// startFromTies starts from the chordal solution over ties and the relative poses within the cliques.
func (c *Coordinator) startFromTies(j *joint, w *weighed) bool {
	for u := range j.n.units {
		j.place(u, lie.Identity())
	}
	j.pin()
	g := posegraph.New(j.graph.Dim, j.graph.Values.Poses)
	b := g.AddBetween()
	d := g.Dim
	for u := range j.n.units {
		unit := &j.n.units[u]
		for i := range unit.part.Cliques {
			q := &unit.part.Cliques[i]
			m := d * (len(q.Nodes) - 1)
			for k := 1; k < len(q.Nodes); k++ {
				block := make([]float64, d*d)
				for r := 0; r < d; r++ {
					copy(block[r*d:], q.H[(d*(k-1)+r)*m+d*(k-1):][:d])
				}
				info := widen(block, c.cfg.Dim)
				x, y := unit.model.poses[q.Nodes[0]], unit.model.poses[q.Nodes[k]]
				b.Add(unit.base+int32(q.Nodes[0]), unit.base+int32(q.Nodes[k]), x.Between(y), &info)
			}
		}
	}
	for i := range j.n.ties {
		t := &j.n.ties[i]
		if j.factor[i] < 0 || !w.held[i] {
			continue
		}
		b.Add(j.n.units[t.from].base+int32(t.fromNode), j.n.units[t.to].base+int32(t.toNode), t.z, &t.info)
	}
	if posegraph.Chordal(g, j.anchors) != nil {
		return false
	}
	copy(j.graph.Values.Poses, g.Values.Poses)
	return true
}

// settle solves the joint problem. Unless all ties are held, ties that stand out are given up by graduated non-convexity, all
// others within an island are tested against the prediction of those held, and those that pass are taken back.
func (c *Coordinator) settle(j *joint, w *weighed) error {
	if c.cfg.HoldAll || len(j.anchors) == len(j.graph.Values.Poses) {
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

// nearEnough is the share of F (or of 1, when F is smaller) below which a promised decrease means that the summaries were condensed
// close to the joint solution.
const nearEnough = 0.05

// finish brings the graph to the solution of this epoch. Far from it the cliques are followed as functions of the poses, to
// convergence. Close to it one Gauss-Newton step from where the robots are is better: it is the step of the adjustment in one
// piece, while the cliques' own curvature, force times lever, is not that of the maps behind them (seen on a recorded set cut in
// two: 171 epochs instead of 5).
//
// One step may leave a little to gain. If every robot then answers that its summary still stands, the cliques are good where the
// fleet is, and the next solution follows them to the end (Coordinator.rest).
func (c *Coordinator) finish(j *joint) error {
	j.sigma = nil
	if !c.rest {
		at := slices.Clone(j.graph.Values.Poses)
		copy(j.graph.Values.Poses, j.start)
		if _, taken := j.solver.Step(nearEnough * max(j.graph.Cost(), 1)); taken {
			cost, gradient := j.solver.Linearise()
			left, err := j.solver.Decrease(gradient)
			c.left = left > converged*max(cost, 1)
			return j.loose(err)
		}
		copy(j.graph.Values.Poses, at)
	}
	c.left = false
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-14
	return j.optimise(o)
}

// converged is the share of F (or of 1, when F is smaller) that a solution may leave to gain.
const converged = 1e-12

func (j *joint) optimise(o posegraph.Options) error {
	r := j.solver.Optimise(o)
	if r.Stop == posegraph.Undetermined {
		return &looseError{max(r.Weakest, 0)}
	}
	return nil
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
	squared, weights := make([]float64, len(active)), make([]float64, len(active))
	measure := func() {
		for k, i := range active {
			squared[k] = j.ties.Chi2(j.factor[i], &j.graph.Values)
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
			j.ties.W[j.factor[i]] = weights[k]
		}
		if err := j.optimise(o); err != nil {
			return err
		}
		measure()
	}
	for k, i := range active {
		w.held[i] = !needed || weights[k] == 1
		j.ties.W[j.factor[i]] = 0
		if w.held[i] {
			j.ties.W[j.factor[i]] = 1
			continue
		}
		j.n.ties[i].judge(msgs.Refused, fmt.Sprintf("contradicts the joint solution: misclosure %.1f, limit %.1f", squared[k], limit),
			msgs.Evidence{Statistic: squared[k], DoF: c.width(), Limit: limit})
	}
	return j.keepTogether(w)
}

// keepTogether checks that the held ties still connect every island.
func (j *joint) keepTogether(w *weighed) error {
	now := j.n.islands(w.held)
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
	limit := c.limit
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
		chi2 := j.ties.Innovation(j.factor[i], &j.graph.Values, sigma, &j.n.ties[i].cov)
		e := msgs.Evidence{Statistic: chi2, DoF: c.width(), Limit: limit}
		if chi2 < limit {
			w.held[i] = true
			j.ties.W[j.factor[i]] = 1
			j.n.ties[i].judge(msgs.Held, fmt.Sprintf("agrees with what the other ties predict: misclosure %.1f, limit %.1f", chi2, limit), e)
			readmitted = true
			continue
		}
		j.n.ties[i].judge(msgs.Refused, fmt.Sprintf("contradicts what the other ties predict: misclosure %.1f, limit %.1f", chi2, limit), e)
	}
	return readmitted, nil
}
