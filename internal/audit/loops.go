package audit

import (
	"errors"
	"math"
	"slices"

	"selvage/internal/reliability"
)

// loops closes the independent loops. The ties of a spanning tree over the robots' own maps are kept, each is then a bridge and met
// exactly; every other held tie closes one loop, and what it lies off the map of the tree is the misclosure, with the covariance of
// all that the loop runs over, the robots' own closures included.
func (w *work) loops() error {
	tree, way := w.tree()
	restore := w.keep()
	defer restore()
	var closing []*Tie
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if t.held && !tree[k] {
			w.b.W[t.factor] = 0
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
		r := w.residual(t.factor)
		stat, dof := reliability.Judge(r, w.b.Info(t.factor), w.predicted(t.factor))
		if dof == 0 {
			continue
		}
		l := Loop{Tie: t.ID, Way: way(t), T: stat, DoF: dof, P: reliability.Survival(stat, dof), Sigmas: math.Sqrt(stat / float64(dof))}
		l.M, l.Rad = w.lengths(r)
		w.out.Loops = append(w.out.Loops, l)
	}
	return nil
}

// keep returns what brings weights and values back to what they are now. The covariances are not brought back.
func (w *work) keep() (restore func()) {
	weights, poses := slices.Clone(w.b.W), slices.Clone(w.p.Graph.Values.Poses)
	return func() {
		copy(w.b.W, weights)
		copy(w.p.Graph.Values.Poses, poses)
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
			for _, v := range [2]int32{w.b.I[t.factor], w.b.J[t.factor]} {
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
				f := w.out.Ties[k].factor
				next := group.root(w.b.I[f])
				if next == at {
					next = group.root(w.b.J[f])
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
		a, b := group.root(w.b.I[t.factor]), group.root(w.b.J[t.factor])
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
