package audit

import (
	"fmt"

	"selvage/internal/adjust"
	"selvage/internal/evidence"
	"selvage/internal/posegraph"
	"selvage/internal/robust"
	"selvage/internal/survey"
)

// LeftOut tells how many of the sightings of a mark by a robot the robust fit has left out, because they do not fit or because the
// others do not place the mark.
type LeftOut struct {
	Robot   string `json:"robot"`
	Mark    string `json:"mark"`
	LeftOut int    `json:"left_out"`
	Of      int    `json:"of"`
}

const joinsNot = "its frames are not held to each other by what fits"

// fit decides which sightings and which ties that are less than a pose are in the adjustment, and takes the others out of the graph.
// Ties with a verdict keep it. Where most of what was seen of a control point is left out, its coordinates disagree with all that was
// seen of it: they are taken away, the fit is repeated, and the mark is tested against them thereafter.
func (w *work) fit() error {
	var decided robust.Result
	for {
		if err := w.p.Analyse(2); err != nil {
			return err
		}
		o := posegraph.DefaultOptions()
		o.Watch = func(int, float64, float64) bool { return w.ctx.Err() == nil }
		decided = w.p.SolveRobust(o, func(tie int) bool { return !w.out.Ties[tie].free })
		switch decided.Stop {
		case posegraph.Interrupted:
			return w.ctx.Err()
		case posegraph.Undetermined:
			return fmt.Errorf("%w in some direction: %s", ErrUndetermined, w.p.Describe(decided.Weakest))
		}
		wrong := w.disbelieved()
		if len(wrong) == 0 {
			break
		}
		w.wrong = append(w.wrong, wrong...)
		if err := w.p.Release(w.wrong); err != nil {
			return err
		}
	}
	finding := map[measurement]*robust.Finding{}
	for i := range decided.Findings {
		f := &decided.Findings[i]
		finding[measurement{sights: f.Set, k: f.K}] = f
	}
	found := make([]*robust.Finding, len(w.p.Sights()))
	for i, e := range w.p.Sights() {
		found[i] = finding[measurement{sights: e.Set, k: e.K}]
	}
	if err := w.p.LeaveOut(); err != nil {
		return err
	}
	w.leftOut()
	for i, e := range w.p.Sights() {
		if e.Tie < 0 {
			continue
		}
		switch t := &w.out.Ties[e.Tie]; {
		case e.Set == nil && !t.free:
			if t.Reason != "" {
				t.Reason += "; "
			}
			t.Reason += joinsNot
		case !t.free:
		case e.Set != nil:
			t.Verdict, t.Reason = "held", found[i].Reason()
		case found[i] != nil && found[i].Verdict == evidence.Refused:
			t.Verdict, t.Reason = "refused", found[i].Reason()
		default:
			t.Verdict, t.Reason = "open", joinsNot
		}
	}
	return nil
}

// disbelieved lists the control points of which more than half of the sightings were cut off.
func (w *work) disbelieved() (wrong []int) {
	priors, mark := w.p.Controls()
	if priors == nil {
		return nil
	}
	cut, all := make([]int, len(w.s.Marks)), make([]int, len(w.s.Marks))
	for _, e := range w.p.Sights() {
		if e.Tie >= 0 || e.Set == nil {
			continue
		}
		m := w.p.Points[e.Set.To[e.K]].Mark
		all[m]++
		if e.Set.W[e.K] < 0.5 {
			cut[m]++
		}
	}
	for _, m := range mark {
		if all[m] > 1 && 2*cut[m] > all[m] {
			wrong = append(wrong, m)
		}
	}
	return wrong
}

// leftOut counts the sightings of marks that are not in the adjustment, check points aside.
func (w *work) leftOut() {
	type pair struct {
		robot int
		mark  string
	}
	at := map[pair]int{}
	for _, e := range w.p.Sights() {
		if e.Tie >= 0 {
			continue
		}
		here := pair{e.Robot, w.s.Robots[e.Robot].Sightings[e.Sighting].Mark}
		k, seen := at[here]
		if !seen {
			k = len(w.out.LeftOut)
			at[here] = k
			w.out.LeftOut = append(w.out.LeftOut, LeftOut{Robot: w.s.Robots[e.Robot].ID, Mark: here.mark})
		}
		w.out.LeftOut[k].Of++
		if e.Set == nil {
			w.out.LeftOut[k].LeftOut++
		}
	}
	kept := w.out.LeftOut[:0]
	for _, l := range w.out.LeftOut {
		if l.LeftOut > 0 {
			kept = append(kept, l)
		}
	}
	w.out.LeftOut = kept
}

// like returns a measurement of a kind, of which only the shape means anything.
func (w *work) like(kind survey.Kind) measurement {
	g := posegraph.New(w.d, nil)
	if kind == survey.WholePose {
		return measurement{poses: g.AddBetween()}
	}
	return measurement{sights: g.AddEncounters(adjust.SenseOf(kind))}
}

// outside makes a measurement of tie k that is not in the graph, in a set of its own.
func (w *work) outside(k int) (measurement, error) {
	t := &w.s.Ties[k]
	g := posegraph.New(w.d, w.p.Graph.Values.Poses)
	if t.Kind == survey.WholePose {
		info, err := t.Cov.Information(w.out.Dimension)
		if err != nil {
			return measurement{}, err
		}
		b := g.AddBetween()
		b.Add(w.out.Ties[k].i, w.out.Ties[k].j, adjust.Pose(t.Pose), &info)
		return measurement{poses: b}, nil
	}
	s, err := w.p.Outside(w.s, k)
	return measurement{sights: s}, err
}
