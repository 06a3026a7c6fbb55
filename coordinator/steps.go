package coordinator

import (
	"math"
	"slices"

	"selvage/internal/posegraph"
)

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
