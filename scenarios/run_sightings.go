package scenarios

import "selvage/msgs"

// sightingVerdicts returns for each robot and each of its sightings of marks what its agent found of it; zero for one that was not
// delivered.
func (r *Run) sightingVerdicts() [][]msgs.VerdictKind {
	out := make([][]msgs.VerdictKind, len(r.Agents))
	for i, a := range r.Agents {
		found := map[uint32][]msgs.VerdictKind{} // by session, in the order they were taken
		for _, f := range a.Sightings() {
			found[f.Session] = append(found[f.Session], f.Verdict)
		}
		all := r.Outing.Survey.Robots[i].Sightings
		out[i] = make([]msgs.VerdictKind, len(all))
		for k := range all {
			if left := found[all[k].Session]; len(left) > 0 {
				out[i][k], found[all[k].Session] = left[0], left[1:]
			}
		}
	}
	return out
}
