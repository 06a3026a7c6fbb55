package adjust

import (
	"selvage/internal/evidence"
	"selvage/internal/posegraph"
)

// Cutoffs are the squared residuals r' Omega r beyond which a sighting counts as wrong, by the numbers that it measures: chi-square at
// one in a thousand.
var Cutoffs = [4]float64{0, 10.828, 13.816, 16.266}

// robust weighs the sightings of a problem by graduated non-convexity with truncated least squares, see [evidence.Schedule]: from a
// cost that every sighting pulls at to one in which those that fit badly are cut off.
type robust struct {
	sets    []*posegraph.Sightings
	graph   *posegraph.Graph
	squared []float64 // of all sightings, each divided by its cutoff
	weights []float64
	pinned  []bool // those never left out; nil for none
}

func newRobust(g *posegraph.Graph) *robust {
	r := &robust{graph: g}
	n := 0
	for _, set := range g.Sets {
		if s, ok := set.(*posegraph.Sightings); ok {
			r.sets = append(r.sets, s)
			n += s.Len()
		}
	}
	r.squared, r.weights = make([]float64, n), make([]float64, n)
	return r
}

// measure squares the residuals.
func (r *robust) measure() {
	i := 0
	for _, s := range r.sets {
		for k := range s.W {
			r.squared[i] = 0
			if r.pinned == nil || !r.pinned[i] {
				r.squared[i] = s.Chi2(k, &r.graph.Values) / Cutoffs[max(1, s.Freedoms(k))]
			}
			i++
		}
	}
}

// weigh hands the weights to the sightings.
func (r *robust) weigh() {
	i := 0
	for _, s := range r.sets {
		i += copy(s.W, r.weights[i:])
	}
}

// pin keeps the sightings of some ties from being left out.
func (r *robust) pin(sights []sighted, keep func(tie int) bool) {
	first := map[*posegraph.Sightings]int{}
	n := 0
	for _, s := range r.sets {
		first[s] = n
		n += s.Len()
	}
	r.pinned = make([]bool, n)
	for i := range sights {
		if e := &sights[i]; e.Set != nil && e.Tie >= 0 && keep(e.Tie) {
			r.pinned[first[e.Set]+e.K] = true
		}
	}
}

// SolveRobust adjusts with all sightings, then leaves out those that do not fit, but for ties that are to be kept (nil: none), and
// returns how many those are; their weight is [evidence.Floor] thereafter. Analyse must have been called.
func (p *Problem) SolveRobust(o posegraph.Options, keep func(tie int) bool) (result posegraph.Result, cut int) {
	r := newRobust(p.Graph)
	if keep != nil {
		r.pin(p.sights, keep)
	}
	return r.solve(p.solver, o, false)
}

// solveRobust weighs all sightings of a graph.
func solveRobust(s *posegraph.Solver, g *posegraph.Graph, o posegraph.Options, fromAll bool) (result posegraph.Result, cut int) {
	return newRobust(g).solve(s, o, fromAll)
}

// solve begins at the values as they stand, or first lets all sightings pull.
func (r *robust) solve(s *posegraph.Solver, o posegraph.Options, fromAll bool) (result posegraph.Result, cut int) {
	for i := range r.weights {
		r.weights[i] = 1
	}
	r.weigh()
	rough := o // a stage is only a way to the next
	rough.Tolerance, rough.MaxIterations = 1e-5, 20
	result.InitialCost = r.graph.Cost()
	if fromAll {
		result = s.Optimise(rough)
	}
	r.measure()
	schedule, any := evidence.NewSchedule(1, r.squared)
	for stage := 0; any && stage < 200 && result.Stop != posegraph.Interrupted && result.Stop != posegraph.Undetermined; stage++ {
		decided := schedule.Next(r.weights, r.squared)
		r.weigh()
		if decided {
			break
		}
		rough.MaxIterations = 4
		result = then(result, s.Optimise(rough))
		r.measure()
	}
	if result.Stop == posegraph.Interrupted || result.Stop == posegraph.Undetermined {
		return result, 0
	}
	result = then(result, s.Optimise(o))
	for _, w := range r.weights {
		if w < 0.5 {
			cut++
		}
	}
	return result, cut
}

// then joins the results of two adjustments of which one went on where the other ended.
func then(a, b posegraph.Result) posegraph.Result {
	b.InitialCost = a.InitialCost
	b.Iterations += a.Iterations
	b.Refused += a.Refused
	return b
}
