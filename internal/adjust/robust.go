package adjust

import (
	"selvage/internal/posegraph"
	"selvage/internal/robust"
)

// TieFindings returns what [Problem.SolveRobust] decided on the ties that are less than a pose, by their number in the survey; nil for
// those that are not in the graph, because nothing joins the frames of their robots.
func (p *Problem) TieFindings(decided *robust.Result) map[int]*robust.Finding {
	type place struct {
		set *posegraph.Sightings
		k   int
	}
	tie := map[place]int{}
	out := map[int]*robust.Finding{}
	for i := range p.sights {
		if e := &p.sights[i]; e.Tie >= 0 {
			out[e.Tie] = nil
			if e.Set != nil {
				tie[place{e.Set, e.K}] = e.Tie
			}
		}
	}
	for i := range decided.Findings {
		f := &decided.Findings[i]
		if k, ok := tie[place{f.Set, f.K}]; ok {
			out[k] = f
		}
	}
	return out
}

// SolveRobust adjusts and leaves out the sightings that do not fit, see [robust.Decide], but for ties that are to be kept (nil: none).
// Analyse must have been called. [Problem.Sights] tells which finding is whose.
func (p *Problem) SolveRobust(o posegraph.Options, keep func(tie int) bool) robust.Result {
	return robust.Decide(p.Graph, p.solver, robust.Options{Adjust: o, Keep: p.kept(keep)})
}

// kept tells of sightings what keep tells of ties.
func (p *Problem) kept(keep func(tie int) bool) func(set *posegraph.Sightings, k int) bool {
	if keep == nil {
		return nil
	}
	type place struct {
		set *posegraph.Sightings
		k   int
	}
	kept := map[place]bool{}
	for i := range p.sights {
		if e := &p.sights[i]; e.Set != nil && e.Tie >= 0 && keep(e.Tie) {
			kept[place{e.Set, e.K}] = true
		}
	}
	return func(set *posegraph.Sightings, k int) bool { return kept[place{set, k}] }
}
