package robust

import (
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/posegraph"
)

// Options steer [Decide] and [Review].
type Options struct {
	// Adjust is for the adjustment at the end; the stages before it are rougher.
	Adjust posegraph.Options

	// FromAll lets every sighting pull before [Decide] looks at any; without it, what fits the values as they stand counts first.
	// Use it where the values are no better than a guess.
	FromAll bool

	// Keep tells which sightings are never refused; nil for none.
	Keep func(set *posegraph.Sightings, k int) bool
}

// Result is what was decided.
type Result struct {
	posegraph.Result
	Findings []Finding // of the batches of sightings of the graph, in their order
	Refused  int
}

// judge weighs the sightings of one graph.
type judge struct {
	g        *posegraph.Graph
	s        *posegraph.Solver
	o        Options
	sets     []*posegraph.Sightings
	findings []Finding
	squared  []float64 // residuals, each divided by its limit
	weights  []float64
	result   posegraph.Result
	began    bool
}

func newJudge(g *posegraph.Graph, s *posegraph.Solver, o Options) *judge {
	j := &judge{g: g, s: s, o: o}
	for _, set := range g.Sets {
		sights, ok := set.(*posegraph.Sightings)
		if !ok {
			continue
		}
		j.sets = append(j.sets, sights)
		for k := range sights.Len() {
			f := Finding{Set: sights, K: k, Limit: Limit(sights.Freedoms(k)), Kept: o.Keep != nil && o.Keep(sights, k)}
			if w := sights.W[k]; w >= 0.5 {
				f.Verdict = evidence.Held
			} else if w > 0 {
				f.Verdict = evidence.Refused
			}
			j.findings = append(j.findings, f)
		}
	}
	j.squared, j.weights = make([]float64, len(j.findings)), make([]float64, len(j.findings))
	return j
}

// weigh hands the weights to the sightings; those that take no part keep their zero.
func (j *judge) weigh() {
	for i := range j.findings {
		if f := &j.findings[i]; f.Verdict != evidence.Open {
			f.Set.W[f.K] = j.weights[i]
		}
	}
}

// measure squares the residuals.
func (j *judge) measure() {
	for i := range j.findings {
		f := &j.findings[i]
		j.squared[i] = 0
		if !f.Kept && f.Verdict != evidence.Open {
			j.squared[i] = f.Set.Chi2(f.K, &j.g.Values) / f.Limit
		}
	}
}

// optimise goes on adjusting and reports whether there is any use in more.
func (j *judge) optimise(o posegraph.Options) bool {
	r := j.s.Optimise(o)
	if j.began {
		r.InitialCost = j.result.InitialCost
	}
	j.began = true
	r.Iterations += j.result.Iterations
	r.Refused += j.result.Refused
	j.result = r
	return r.Stop != posegraph.Interrupted && r.Stop != posegraph.Undetermined
}

// rough returns options for a stage on the way.
func (j *judge) rough(tolerance float64, iterations int) posegraph.Options {
	o := j.o.Adjust
	o.Tolerance, o.MaxIterations = math.Max(o.Tolerance, tolerance), min(o.MaxIterations, iterations)
	return o
}

// Decide weighs all sightings of g from nothing, whatever their weights are but 0, which takes no part: by graduated non-convexity with
// truncated least squares, from a cost that every sighting pulls at to one in which those that fit badly are cut off; then
// [Review]. The solver s must be that of g.
func Decide(g *posegraph.Graph, s *posegraph.Solver, o Options) Result {
	j := newJudge(g, s, o)
	for i := range j.weights {
		j.weights[i] = 1
	}
	j.weigh()
	j.result.InitialCost, j.began = g.Cost(), true
	if !j.graduate() || !j.unwind() {
		return j.conclude()
	}
	for i := range j.findings {
		f := &j.findings[i]
		switch {
		case f.Verdict == evidence.Open:
		case j.weights[i] >= 0.5:
			f.Verdict = evidence.Held
		default:
			f.Verdict = evidence.Refused
		}
	}
	return j.review()
}

// graduate goes from all sightings to those that fit.
func (j *judge) graduate() bool {
	if j.o.FromAll && !j.optimise(j.rough(1e-5, 20)) {
		return false
	}
	j.measure()
	schedule, any := evidence.NewSchedule(1, j.squared)
	for stage := 0; any && stage < 200; stage++ {
		decided := schedule.Next(j.weights, j.squared)
		j.weigh()
		if decided {
			break
		}
		if !j.optimise(j.rough(1e-5, 4)) {
			return false
		}
		j.measure()
	}
	return true
}

// unwind undoes whole turns that odometry was bent by on the way, where that lowers the cost: then the weights are found anew.
func (j *judge) unwind() bool {
	poses, points := slices.Clone(j.g.Values.Poses), slices.Clone(j.g.Values.Points)
	cost := j.g.Cost()
	if !posegraph.Unwind(j.g) {
		return true
	}
	if !j.optimise(j.rough(1e-5, 30)) {
		return false
	}
	if j.g.Cost() > cost {
		copy(j.g.Values.Poses, poses)
		copy(j.g.Values.Points, points)
		return true
	}
	return j.graduate()
}

// Review goes on from the weights of the sightings of g as they stand: 1 held, 0 no part, anything less than 1/2 refused. Each is tested against
// what all others predict; what fails is refused, what was refused and agrees with a sharp prediction is let in, until nothing changes.
func Review(g *posegraph.Graph, s *posegraph.Solver, o Options) Result {
	return newJudge(g, s, o).review()
}

const (
	mostRounds = 12  // of a review
	mostTurns  = 2   // of one sighting: refused, let in, refused for good
	sharp      = 8.0 // variance predicted, over its own, with which a sighting may still be let in
	abreast    = 0.5 // of the worst statistic, from which on a sighting is refused with it
)

// review is [Review].
func (j *judge) review() Result {
	for round := 0; ; round++ {
		j.settle()
		if !j.optimise(j.o.Adjust) {
			return j.conclude()
		}
		sigma, err := j.s.Covariance()
		if err != nil {
			return j.conclude()
		}
		for i := range j.findings {
			j.findings[i].test(&j.g.Values, sigma)
		}
		if round == mostRounds || !j.revise() {
			return j.conclude()
		}
	}
}

// settle gives every sighting the weight of its verdict.
func (j *judge) settle() {
	for i := range j.findings {
		j.weights[i] = 1
		if j.findings[i].Verdict == evidence.Refused {
			j.weights[i] = evidence.Floor
		}
	}
	j.weigh()
}

// test computes the statistic.
func (f *Finding) test(v *posegraph.Values, sigma posegraph.Covariance) {
	if f.Verdict == evidence.Open {
		return
	}
	f.Statistic, f.DoF, f.Loose = f.Set.LeaveOneOut(f.K, v, sigma)
	f.Limit = 0
	if f.DoF > 0 {
		f.Limit = Limit(f.DoF)
	}
}

// revise changes verdicts that the statistics contradict and reports whether it did. One wrong sighting pulls others with it, so
// of those held only the worst are refused at a time, and what comes near them.
func (j *judge) revise() (changed bool) {
	worst := 0.0
	for i := range j.findings {
		if f := &j.findings[i]; f.refusable() {
			worst = math.Max(worst, f.Statistic/f.Limit)
		}
	}
	for i := range j.findings {
		f := &j.findings[i]
		switch {
		case f.refusable() && f.Statistic/f.Limit >= abreast*worst:
			f.Verdict = evidence.Refused
		case f.Verdict == evidence.Refused && f.DoF > 0 && f.Statistic < f.Limit && f.Loose < sharp && f.turns < mostTurns:
			f.Verdict = evidence.Held
		default:
			continue
		}
		f.turns++
		changed = true
	}
	return changed
}

// refusable tells whether a sighting is held and contradicts the others.
func (f *Finding) refusable() bool {
	return f.Verdict == evidence.Held && !f.Kept && f.DoF > 0 && f.Statistic > f.Limit
}

// conclude counts.
func (j *judge) conclude() Result {
	r := Result{Result: j.result, Findings: j.findings}
	for i := range r.Findings {
		if r.Findings[i].Verdict == evidence.Refused {
			r.Refused++
		}
	}
	return r
}
