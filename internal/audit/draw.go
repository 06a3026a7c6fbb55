package audit

import (
	"cmp"
	"slices"

	"selvage/internal/report"
)

// drawn is how many ties the plan has at most: more would be a grey cloud, and no page.
const drawn = 1000

// draw makes the plan: tracks, and the ties whose two ends share a datum. The island with the most sessions is the one whose frame
// the plan is in; the others get plans of their own.
func (w *work) draw() error {
	order := make([]int, w.p.Islands)
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		return cmp.Compare(len(w.out.Islands[b].Sessions), len(w.out.Islands[a].Sessions))
	})
	number := make([]int, w.p.Islands)
	for n, i := range order {
		number[i] = n
	}
	w.out.main = order[0]
	robot := map[string]int{}
	for i := range w.s.Robots {
		robot[w.s.Robots[i].ID] = i + 1
	}
	poses := w.p.Graph.Values.Poses
	tracks := make([]report.Track, len(w.units))
	for u := range tracks {
		tracks[u] = report.Track{Robot: w.unitName(int32(u)), Hue: robot[w.units[u].robot]}
	}
	for v := range w.p.Keys {
		if w.p.Keys[v].ID < 0 && v >= w.given() { // made at a moment: not in the order of the track
			continue
		}
		t := &tracks[w.unit[v]]
		if len(t.Points) == 0 {
			t.Island = number[w.p.Island[v]]
		}
		t.Points = append(t.Points, poses[v].T)
	}
	grid := w.s.Meta.Datum.Grid
	plan := report.Plan{Title: w.out.Survey, Datum: w.out.Datum, Epoch: "the adjustment in one piece", DatumTiedToNorth: grid != nil && grid.YawRad == 0, Tracks: tracks}
	ties := make([]*Tie, 0, len(w.out.Ties))
	for k := range w.out.Ties {
		if t := &w.out.Ties[k]; t.held || t.placed {
			ties = append(ties, t)
		}
	}
	if len(ties) > drawn {
		slices.SortStableFunc(ties, func(x, y *Tie) int {
			return cmp.Or(cmp.Compare(rank[x.Status], rank[y.Status]), cmp.Compare(y.detectable(), x.detectable()))
		})
		ties = ties[:drawn]
		w.out.hidden = true
	}
	for _, t := range ties {
		i, j := t.i, t.j
		m := report.TieMark{ID: t.ID, From: poses[i].T, To: poses[j].T, Island: number[w.p.Island[i]], Verdict: t.Verdict, Unchecked: t.Status == Unchecked}
		if t.DetectableM != nil {
			m.SmallestDetectableM = *t.DetectableM
		}
		plan.Ties = append(plan.Ties, m)
	}
	w.out.plan = plan
	return nil
}

// given is the number of keyframes that the survey has; those made at moments follow.
func (w *work) given() int {
	n := 0
	for i := range w.s.Robots {
		n += len(w.s.Robots[i].Keyframes)
	}
	return n
}
