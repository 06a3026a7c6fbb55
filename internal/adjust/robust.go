package adjust

import (
	"selvage/internal/posegraph"
	"selvage/internal/robust"
)

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
