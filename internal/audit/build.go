package audit

import (
	"context"
	"fmt"

	"gonum.org/v1/gonum/stat/distuv"

	"selvage/internal/adjust"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/internal/survey"
)

// unit is one session of one robot.
type unit struct {
	robot   string
	session uint32
}

// work is an audit under way.
type work struct {
	ctx context.Context
	in  *Input
	s   *survey.Survey
	out Audit

	p      *adjust.Problem
	b      *posegraph.Between
	d      int // of a pose: 3 or 6
	units  []unit
	unit   []int32 // variable -> unit
	solver *posegraph.Solver
	sigma  posegraph.Covariance
	cost   float64
	all    []measurement // of the adjustment; the relative poses come first, each in its place
	sort   []class       // of each
	owner  []int         // robot that made it, -1 for a control point
	tie    []int         // that it is, else -1
	at     map[measurement]int
	alone  []bool           // on no loop, whatever a sighting may hold
	rigid  *adjust.Rigidity // of the own maps; nil without sightings
	wrong  []int            // marks whose coordinates are left out
}

// build makes the pose graph of everything that is held.
func (w *work) build() error {
	s := w.s
	verdict := make(map[string]*survey.ResultVerdict, len(w.in.Verdicts))
	for i := range w.in.Verdicts {
		verdict[w.in.Verdicts[i].Tie] = &w.in.Verdicts[i]
	}
	w.out = Audit{
		Survey: s.Meta.Name, Datum: s.Meta.Datum.Name, Dimension: s.Meta.Dimension, Robots: len(s.Robots), Decided: w.in.Decided,
		Basin: "not decided",
		Ties:  make([]Tie, len(s.Ties)), Removal: []string{}, Controls: []string{}, Marks: []Mark{}, LeftOut: []LeftOut{}, Bridges: []string{}, Places: []Place{}, Sets: []Set{}, Near: []Near{}, Loops: []Loop{}, Spread: []Spread{}, Next: []Candidate{},
	}
	for i := range s.Ties {
		f := &s.Ties[i]
		t := Tie{ID: f.ID, Kind: f.Kind.String(), Verdict: "open", Reason: "has no verdict", Status: Untested,
			From: Keyframe{f.FromRobot, f.FromSession, f.FromKey}, To: Keyframe{f.ToRobot, f.ToSession, f.ToKey}}
		if f.FromByStamp {
			t.From.Key = -f.FromStampNS
		}
		if f.ToByStamp {
			t.To.Key = -f.ToStampNS
		}
		switch v := verdict[f.ID]; {
		case v != nil:
			t.Verdict, t.Reason = v.Verdict, v.Reason
			t.held = v.Verdict == "held"
		case f.Kind != survey.WholePose:
			t.held, t.free = true, true
		}
		w.out.Ties[i] = t
	}
	var err error
	// Only what is held is in the graph: false ties join what lies far apart, and would fill the factor.
	w.p, err = adjust.NewWithEnds(s, func(k int) bool { return w.out.Ties[k].held })
	if err != nil {
		return err
	}
	w.p.Apart = w.in.Place
	w.b, w.d = w.p.Factors, w.p.Graph.Dim
	w.out.Keyframes = len(w.p.Keys)
	w.out.sighted = len(w.p.Sights()) > 0
	w.findUnits()
	return nil
}

func keyframe(k adjust.Key) Keyframe { return Keyframe{k.Robot, k.Session, k.ID} }

func (w *work) findUnits() {
	number := map[unit]int32{}
	w.unit = make([]int32, len(w.p.Keys))
	for v, k := range w.p.Keys {
		u := unit{k.Robot, k.Session}
		n, known := number[u]
		if !known {
			n = int32(len(w.units))
			number[u] = n
			w.units = append(w.units, u)
		}
		w.unit[v] = n
	}
	w.out.Sessions = len(w.units)
}

// unitName is how a session is called: by its robot where that has only one.
func (w *work) unitName(u int32) string {
	several := 0
	for i := range w.units {
		if w.units[i].robot == w.units[u].robot {
			several++
		}
	}
	if several == 1 {
		return w.units[u].robot
	}
	return fmt.Sprintf("%s/%d", w.units[u].robot, w.units[u].session)
}

// findIslands names the sessions of each island, and what holds it: its first keyframe, or control points.
func (w *work) findIslands() {
	w.out.Islands = make([]Island, w.p.Islands)
	for _, v := range w.p.Anchors {
		k := keyframe(w.p.Keys[v])
		w.out.Islands[w.p.Island[v]].Gauge = &k
	}
	if priors, mark := w.p.Controls(); priors != nil {
		for k, m := range mark {
			i := &w.out.Islands[w.p.Island[w.p.Graph.Point(priors.Point(k))]]
			i.Controls = append(i.Controls, w.s.Marks[m].Name)
		}
	}
	seen := map[[2]int32]bool{}
	for v, i := range w.p.Island[:len(w.p.Keys)] {
		if at := [2]int32{i, w.unit[v]}; !seen[at] {
			seen[at] = true
			w.out.Islands[i].Sessions = append(w.out.Islands[i].Sessions, w.unitName(w.unit[v]))
		}
	}
}

// groups joins numbers to sets; the root of a set is its lowest number.
type groups []int32

func newGroups(n int) groups {
	g := make(groups, n)
	for i := range g {
		g[i] = int32(i)
	}
	return g
}

func (g groups) root(i int32) int32 {
	for g[i] != i {
		g[i] = g[g[i]]
		i = g[i]
	}
	return i
}

func (g groups) join(i, j int32) {
	i, j = g.root(i), g.root(j)
	g[max(i, j)] = min(i, j)
}

// adjust solves, and computes the covariances.
func (w *work) adjust() error {
	if len(w.p.Keys) == 0 {
		return fmt.Errorf("the survey holds no keyframes: there is nothing to audit")
	}
	if err := w.p.Begin(adjust.Auto); err != nil {
		return err
	}
	if w.out.sighted {
		if err := w.fit(); err != nil {
			return err
		}
	}
	if err := w.p.Analyse(2); err != nil {
		return err
	}
	w.findIslands()
	w.list()
	if w.out.sighted {
		w.rigid = w.p.Rigidity()
	}
	w.solver = w.p.Solver()
	r, err := w.solve()
	if err != nil {
		return err
	}
	w.cost = r.Cost
	a := &w.out.Adjustment
	a.Stop, a.Iterations, a.T = r.Stop.String(), r.Iterations, 2*r.Cost
	for _, m := range w.all {
		if *m.weight() != 0 {
			a.DoF += w.measured(m)
		}
	}
	a.DoF -= w.d*(len(w.p.Keys)-len(w.p.Anchors)) + w.turns()*len(w.p.Points)
	if a.DoF > 0 {
		a.P = distuv.ChiSquared{K: float64(a.DoF)}.Survival(a.T)
	} else {
		a.DoF, a.P = 0, 1
	}
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if t.i >= 0 && t.j >= 0 {
			t.apart = distance(w.p.Graph.Values.Poses[t.i].T, w.p.Graph.Values.Poses[t.j].T)
		}
	}
	return nil
}

// list notes what is in the adjustment, and the ends of all ties.
func (w *work) list() {
	w.at = map[measurement]int{}
	add := func(m measurement, sort class, owner, tie int) {
		if m.poses == nil {
			w.at[m] = len(w.all)
		}
		w.all, w.sort, w.owner, w.tie = append(w.all, m), append(w.sort, sort), append(w.owner, owner), append(w.tie, tie)
	}
	robot := make(map[string]int, len(w.s.Robots))
	for i := range w.s.Robots {
		robot[w.s.Robots[i].ID] = i
	}
	for k := range w.b.I {
		add(measurement{poses: w.b, k: k}, odometry, robot[w.p.Keys[w.b.I[k]].Robot], -1)
	}
	// The measurements of the robots come first, in their order; what was added behind them is a tie, or the second half of an odometry
	// step that was split at a moment.
	k := 0
	for i := range w.s.Robots {
		for _, r := range w.s.Robots[i].Relatives {
			if r.Kind != 0 {
				w.sort[k] = closure
			}
			k++
		}
	}
	for k, f := range w.p.Tie {
		t := &w.out.Ties[k]
		t.held = false
		t.i, t.j = w.p.Ends[k][0], w.p.Ends[k][1]
		if f >= 0 {
			t.held, t.m = true, w.all[f]
			w.sort[f], w.tie[f] = between, k
		}
	}
	for _, e := range w.p.Sights() {
		switch m := (measurement{sights: e.Set, k: e.K}); {
		case e.Set == nil:
		case e.Tie >= 0:
			t := &w.out.Ties[e.Tie]
			t.held, t.m = true, m
			add(m, partial, robot[w.p.Keys[t.i].Robot], e.Tie)
		default:
			add(m, sighting, e.Robot, -1)
		}
	}
	if priors, mark := w.p.Controls(); priors != nil {
		for k := range mark {
			add(measurement{priors: priors, k: k}, control, -1, -1)
		}
	}
	for k := range w.out.Ties {
		t := &w.out.Ties[k]
		if t.i >= 0 {
			t.From = keyframe(w.p.Keys[t.i])
		}
		if t.j >= 0 {
			t.To = keyframe(w.p.Keys[t.j])
		}
		t.placed = !t.held && t.i >= 0 && t.j >= 0 && t.i != t.j && w.p.Island[t.i] == w.p.Island[t.j]
		t.Parts = w.components(w.like(w.s.Ties[k].Kind))
	}
}

// solve brings the graph to its optimum with the weights as they are, and the covariances with it.
func (w *work) solve() (posegraph.Result, error) {
	return w.solveTo(posegraph.DefaultOptions().Tolerance)
}

// nearly is the tolerance of adjustments of which no more than a few digits are used.
const nearly = 1e-8

func (w *work) solveTo(tolerance float64) (posegraph.Result, error) {
	o := posegraph.DefaultOptions()
	o.Tolerance = tolerance
	o.Watch = func(int, float64, float64) bool { return w.ctx.Err() == nil }
	r := w.solver.Optimise(o)
	switch r.Stop {
	case posegraph.Interrupted:
		return r, w.ctx.Err()
	case posegraph.Undetermined:
		return r, fmt.Errorf("%w in some direction: %s", ErrUndetermined, w.p.Describe(r.Weakest))
	}
	return r, w.covariance()
}

func (w *work) covariance() error {
	var err error
	if w.sigma, err = w.solver.Covariance(); err != nil {
		return fmt.Errorf("%w in some direction (%w)", ErrUndetermined, err)
	}
	return nil
}

// again makes a solver for a graph that has more factors than before.
func (w *work) again() (err error) {
	w.solver, err = posegraph.NewSolver(w.p.Graph, w.p.Anchors, sparse.Options{Workers: 2})
	return err
}

// turns is the number of the first component that is a rotation.
func (w *work) turns() int {
	if w.d == 3 {
		return 2
	}
	return 3
}
