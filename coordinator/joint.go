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

// recall puts what the last solution placed exactly where that was: a robot whose summary still stands has followed it there, though its
// summary was condensed a little beside.
func (c *Coordinator) recall(j *joint) {
	for u := range j.n.units {
		unit := &j.n.units[u]
		if j.islands[j.member[u]].born == 0 {
			continue
		}
		p := c.places[unit.id]
		for k, id := range p.ids {
			if v, found := unit.find(id); found && unit.model.inMain(v) {
				j.graph.Values.Poses[int(unit.base)+v] = p.poses[k]
			}
		}
		for k, v := range j.pointsOf[u] {
			mark := unit.part.Points[k].Mark
			if i := slices.IndexFunc(p.points, func(x msgs.Point) bool { return x.Mark == mark }); i >= 0 {
				j.graph.Values.Points[v] = p.points[i].At
			}
		}
	}
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
	if len(w.meetings) > 0 || len(j.points) > 0 { // whole poses alone do not connect what marks do
		return false
	}
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
			m := len(q.B)
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
		if j.factor[i] < 0 || !w.held[i] || t.sight != nil {
			continue
		}
		b.Add(j.n.units[t.from].base+int32(t.fromNode), j.n.units[t.to].base+int32(t.toNode), t.z, &t.info)
	}
	fixed := slices.DeleteFunc(slices.Clone(j.anchors), func(v int32) bool { return int(v) >= len(g.Values.Poses) }) // no marks here
	if posegraph.Chordal(g, fixed) != nil {
		return false
	}
	copy(j.graph.Values.Poses, g.Values.Poses)
	return true
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

// nearEnough is the share of F (or of 1, when F is smaller) below which a promised decrease means that the summaries were condensed
// close to the joint solution.
const nearEnough = 0.05

// finish brings the graph to the solution of this epoch. Far from it the cliques are followed as functions of the poses, to
// convergence. Close to it one Gauss-Newton step from where the robots are is better: it is the step of the adjustment in one
// piece, while the cliques' own curvature, force times lever, is not that of the maps behind them (seen on a recorded set cut in
// two: 171 epochs instead of 5).
//
// Whether far is far is seen from what came of the last solution that followed the cliques to the end: when the robots' maps have gained
// less than half of what it promised, single steps are taken until the network changes.
//
// One step may leave a little to gain. If every robot then answers that its summary still stands, the cliques are good where the
// fleet is, and the next solution takes steps until nothing is left (Coordinator.rest). It does not minimise: where the forces on a
// map are large, the end of the steps may be a saddle of the cliques as functions, and yet the bottom of the maps behind them.
func (c *Coordinator) finish(j *joint) error {
	j.sigma = nil
	at := posegraph.Values{Poses: slices.Clone(j.graph.Values.Poses), Points: slices.Clone(j.graph.Values.Points)}
	j.put(&j.start)
	start := j.graph.Cost()
	limit, steps := nearEnough*max(start, 1), 1
	if c.promise.broken(j, start+j.own()) {
		limit = math.Inf(1)
	}
	if c.rest {
		limit, steps = math.Inf(1), mostSteps
	}
	var before posegraph.Values
	least := math.Inf(1)
	for c.left = true; c.left && steps > 0; steps-- {
		before = posegraph.Values{Poses: slices.Clone(j.graph.Values.Poses), Points: slices.Clone(j.graph.Values.Points)}
		if _, taken := j.solver.Step(limit); !taken {
			j.put(&at)
			return c.follow(j)
		}
		limit = math.Inf(1)
		cost, gradient := j.solver.Linearise()
		left, err := j.solver.Decrease(gradient)
		if err != nil {
			return j.loose(err)
		}
		if left > least { // as functions the cliques lead away from here
			j.put(&before)
			break
		}
		least, c.left = left, left > converged*max(cost+j.own(), 1)
	}
	c.left = c.left && !c.rest
	return nil
}

// mostSteps bounds the steps towards rest.
const mostSteps = 10

// follow follows the cliques to the end, and notes what that promises.
func (c *Coordinator) follow(j *joint) error {
	c.left = false
	before := j.graph.Cost()
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-14
	err := j.optimise(o)
	c.promise.next = promised{j.size(), before + j.own(), j.graph.Cost() + j.own()}
	return err
}

// own is the cost of the robots' own maps where they were condensed.
func (j *joint) own() (sum float64) {
	for u := range j.n.units {
		sum += j.n.units[u].part.Cost
	}
	return sum
}

// size tells one network from another.
func (j *joint) size() [2]int { return [2]int{j.graph.Variables(), len(j.n.ties)} }

// promised is what a solution that followed the cliques to the end promised: F of the whole fleet before and after.
type promised struct {
	size          [2]int
	before, after float64
}

// promise remembers the newest of them that was published, and whether it was kept.
type promise struct {
	last, next promised // next is that of the solution under way
	single     [2]int   // the network for which single steps are taken
}

// broken tells whether single steps are to be taken, F being now what it says.
func (p *promise) broken(j *joint, now float64) bool {
	size := j.size()
	if p.last.size == size && now-p.last.after > 0.5*(p.last.before-p.last.after) {
		p.single = size
	}
	return p.single == size
}

// converged is the share of F (or of 1, when F is smaller) that a solution may leave to gain.
const converged = 1e-11

// put sets the values.
func (j *joint) put(v *posegraph.Values) {
	copy(j.graph.Values.Poses, v.Poses)
	copy(j.graph.Values.Points, v.Points)
}

func (j *joint) optimise(o posegraph.Options) error {
	r := j.solver.Optimise(o)
	if r.Stop == posegraph.Undetermined {
		return j.freed(max(r.Weakest, 0))
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
