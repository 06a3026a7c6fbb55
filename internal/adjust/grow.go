package adjust

import (
	"cmp"
	"math"
	"slices"

	"selvage/internal/posegraph"
	"selvage/internal/robust"
	"selvage/internal/sparse"
)

// Where a robot has no map but its odometry, one frame for the whole of its way fits only a part of what it saw. grow then lets the
// sightings between bodies in by waves, those first whose place the solution so far predicts best, and each only if it agrees
// with the prediction; so the ways bend into place from where the frames hold. It works on the coarse graph.
func (p *Problem) grow() {
	const (
		enough   = 0.8 // of the sightings agree with the frames: nothing to grow
		waves    = 80
		admitted = 0.05 // share of the sightings, at least, that a wave considers
	)
	var all []waiting
	for i := range p.sights {
		if e := &p.sights[i]; e.Set != nil && e.to >= 0 && p.body[e.from] != p.body[e.to] {
			all = append(all, waiting{set: e.Set, k: e.K})
		}
	}
	agree := 0
	for i := range all {
		w := &all[i]
		if w.set.W[w.k] = 0; w.set.Chi2(w.k, &p.Graph.Values) < robust.Limit(w.set.Freedoms(w.k)) {
			w.set.W[w.k] = 1
			agree++
		}
	}
	everything := func() {
		for i := range all {
			all[i].set.W[all[i].k] = 1
		}
	}
	if float64(agree) > enough*float64(len(all)) {
		everything()
		return
	}
	s, err := posegraph.NewSolver(p.Graph, p.Anchors, sparse.Options{})
	if err != nil {
		everything()
		return
	}
	before := slices.Clone(p.Graph.Values.Poses)
	beforePoints := slices.Clone(p.Graph.Values.Points)
	o := posegraph.DefaultOptions()
	o.Tolerance, o.MaxIterations = 1e-4, 10
	for range waves {
		if r := s.Optimise(o); r.Stop == posegraph.Undetermined {
			copy(p.Graph.Values.Poses, before)
			copy(p.Graph.Values.Points, beforePoints)
			break
		}
		sigma, err := s.Covariance()
		if err != nil {
			break
		}
		if !admit(all, p.Graph, sigma, int(admitted*float64(len(all)))+1) {
			break
		}
	}
	everything()
}

// waiting is a sighting between bodies; its weight is zero until it is let in.
type waiting struct {
	set    *posegraph.Sightings
	k      int
	spread float64 // of the place that it should have seen, m
}

// admit lets in, of the sightings outside, those whose place is known best, at least so many or all to within half a metre, if they agree
// with the prediction; where none of these does it looks further. It reports whether it let any in.
func admit(all []waiting, g *posegraph.Graph, sigma posegraph.Covariance, least int) bool {
	var out []*waiting
	for i := range all {
		w := &all[i]
		if w.set.W[w.k] == 0 {
			w.spread = w.set.Spread(w.k, &g.Values, sigma)
			out = append(out, w)
		}
	}
	slices.SortStableFunc(out, func(a, b *waiting) int { return cmp.Compare(a.spread, b.spread) })
	some := false
	for i, w := range out {
		if some && i >= least && w.spread > 0.5 || math.IsNaN(w.spread) {
			break
		}
		if w.set.Innovation(w.k, &g.Values, sigma) < robust.Limit(w.set.Freedoms(w.k)) {
			w.set.W[w.k] = 1
			some = true
		}
	}
	return some
}
