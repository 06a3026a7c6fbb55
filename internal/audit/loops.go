package audit

import (
	"errors"
	"math"
	"slices"

	"selvage/internal/reliability"
	"selvage/internal/survey"
)

// loops closes the independent loops. The ties of a spanning tree over the robots' own maps are kept, each is then a bridge and met
// exactly; every other held tie closes one loop, and what it lies off the map of the tree is the misclosure, with the covariance of
// all that the loop runs over, the robots' own closures included. Where there are sightings, that is done with the relative poses alone.
func (w *work) loops() error {
	if w.out.sighted {
		return w.loopsOfPoses()
	}
	tree, way := w.tree()
	restore := w.keep()
	defer restore()
	var closing []*Tie
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if t.held && !tree[k] {
			*t.m.weight() = 0
			closing = append(closing, t)
		}
	}
	if len(closing) == 0 {
		return nil
	}
	if _, err := w.solve(); errors.Is(err, ErrUndetermined) { // a tie of the tree does not measure all of a pose
		w.out.unclosed = true
		return nil
	} else if err != nil {
		return err
	}
	for _, t := range closing {
		r := w.residual(t.m)
		stat, dof := reliability.Judge(r, w.info(t.m), w.predicted(t.m))
		if dof == 0 {
			continue
		}
		l := Loop{Tie: t.ID, Way: way(t), T: stat, DoF: dof, P: reliability.Survival(stat, dof), Sigmas: math.Sqrt(stat / float64(dof))}
		l.M, l.Rad = w.lengths(t.m, r)
		w.out.Loops = append(w.out.Loops, l)
	}
	return nil
}

// loopsOfPoses closes loops in the survey without what is less than a pose.
func (w *work) loopsOfPoses() error {
	only := *w.s
	only.Ties, only.Marks, only.Robots = nil, nil, slices.Clone(w.s.Robots)
	for i := range only.Robots {
		only.Robots[i].Sightings = nil
	}
	var verdicts []survey.ResultVerdict
	for k := range w.out.Ties {
		if t := &w.out.Ties[k]; t.held && t.m.poses != nil {
			only.Ties = append(only.Ties, w.s.Ties[k])
			verdicts = append(verdicts, survey.ResultVerdict{Tie: t.ID, Verdict: "held"})
		}
	}
	if len(only.Ties) < 2 {
		return nil
	}
	sub := &work{ctx: w.ctx, in: &Input{Survey: &only, Verdicts: verdicts}, s: &only}
	for _, do := range []func() error{sub.build, sub.adjust, sub.loops} {
		if err := do(); errors.Is(err, ErrUndetermined) { // sightings hold what is free here
			w.out.unclosed = true
			return nil
		} else if err != nil {
			return err
		}
	}
	w.out.Loops, w.out.unclosed = sub.out.Loops, sub.out.unclosed
	return nil
}

// keep returns what brings weights and values back to what they are now. The covariances are not brought back.
func (w *work) keep() (restore func()) {
	weights := make([]float64, len(w.all))
	for i, m := range w.all {
		weights[i] = *m.weight()
	}
	v := &w.p.Graph.Values
	poses, points := slices.Clone(v.Poses), slices.Clone(v.Points)
	return func() {
		for i, m := range w.all {
			*m.weight() = weights[i]
		}
		copy(v.Poses, poses)
		copy(v.Points, points)
	}
}

// tree chooses held ties that join all that hangs together, by as few ties as can be between any part and the first of its island,
// and returns the ties of the tree on the way between the ends of another.
func (w *work) tree() (in []bool, way func(t *Tie) []string) {
	group := newGroups(len(w.p.Keys)) // the robots' own maps
	tie := make([]bool, w.b.Len())
	for _, f := range w.p.Tie {
		if f >= 0 {
			tie[f] = true
		}
	}
	for k := range w.b.I {
		if !tie[k] && w.b.W[k] != 0 {
			group.join(w.b.I[k], w.b.J[k])
		}
	}
	touching := map[int32][]int{} // part -> ties
	for k := range w.out.Ties {
		if t := &w.out.Ties[k]; t.held {
			for _, v := range [2]int32{t.i, t.j} {
				touching[group.root(v)] = append(touching[group.root(v)], k)
			}
		}
	}
	in = make([]bool, len(w.out.Ties))
	type step struct {
		up    int32 // part
		tie   int
		depth int
	}
	steps := map[int32]step{}
	for v := range int32(len(w.p.Keys)) {
		if group.root(v) != v {
			continue
		}
		if _, seen := steps[v]; seen {
			continue
		}
		steps[v] = step{v, -1, 0}
		for queue := []int32{v}; len(queue) > 0; queue = queue[1:] {
			at := queue[0]
			for _, k := range touching[at] {
				t := &w.out.Ties[k]
				next := group.root(t.i)
				if next == at {
					next = group.root(t.j)
				}
				if _, seen := steps[next]; !seen {
					steps[next] = step{at, k, steps[at].depth + 1}
					in[k] = true
					queue = append(queue, next)
				}
			}
		}
	}
	return in, func(t *Tie) []string {
		a, b := group.root(t.i), group.root(t.j)
		var there, back []string
		for a != b {
			if steps[a].depth >= steps[b].depth {
				there = append(there, w.out.Ties[steps[a].tie].ID)
				a = steps[a].up
			} else {
				back = append(back, w.out.Ties[steps[b].tie].ID)
				b = steps[b].up
			}
		}
		slices.Reverse(back)
		return append(there, back...)
	}
}
