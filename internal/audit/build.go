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
	parts  int     // islands
	solver *posegraph.Solver
	sigma  posegraph.Covariance
	cost   float64
	bridge []bool // factor: on no loop
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
		Ties:  make([]Tie, len(s.Ties)), Removal: []string{}, Bridges: []string{}, Places: []Place{}, Sets: []Set{}, Loops: []Loop{}, Spread: []Spread{}, Next: []Candidate{},
	}
	for i := range s.Ties {
		f := &s.Ties[i]
		t := Tie{ID: f.ID, Verdict: "open", Reason: "has no verdict", Status: Untested, factor: -1,
			From: Keyframe{f.FromRobot, f.FromSession, f.FromKey}, To: Keyframe{f.ToRobot, f.ToSession, f.ToKey}}
		if f.ToByStamp {
			t.To.Key = -f.ToStampNS
		}
		if v := verdict[f.ID]; v != nil {
			t.Verdict, t.Reason = v.Verdict, v.Reason
		}
		t.held = t.Verdict == "held"
		w.out.Ties[i] = t
	}
	var err error
	// Only what is held is in the graph: false ties join what lies far apart, and would fill the factor.
	w.p, err = adjust.New(s, func(k int) bool { return w.out.Ties[k].held })
	if err != nil {
		return err
	}
	w.p.Apart = w.in.Place
	w.b, w.d = w.p.Factors, w.p.Graph.Dim
	w.out.Keyframes = len(w.p.Keys)
	for k, f := range w.p.Tie {
		t := &w.out.Ties[k]
		t.factor = f
		if f >= 0 {
			t.i, t.j = w.b.I[f], w.b.J[f]
			t.To = keyframe(w.p.Keys[t.j])
			continue
		}
		var from, to bool
		t.i, from = w.p.Var[adjust.Key{Robot: t.From.Robot, Session: t.From.Session, ID: t.From.Key}]
		t.j, to = w.p.Var[adjust.Key{Robot: t.To.Robot, Session: t.To.Session, ID: t.To.Key}]
		t.placed = from && to && t.i != t.j && w.p.Island[t.i] == w.p.Island[t.j]
	}
	w.findUnits()
	w.findIslands()
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

// findIslands names the sessions of each island and its first keyframe, which is held fixed.
func (w *work) findIslands() {
	w.parts = len(w.p.Anchors)
	for _, v := range w.p.Anchors {
		w.out.Islands = append(w.out.Islands, Island{Gauge: keyframe(w.p.Keys[v])})
	}
	seen := map[[2]int32]bool{}
	for v, i := range w.p.Island {
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
	if err := w.p.Analyse(2); err != nil {
		return err
	}
	w.solver = w.p.Solver()
	r, err := w.solve()
	if err != nil {
		return err
	}
	w.cost = r.Cost
	a := &w.out.Adjustment
	a.Stop, a.Iterations, a.T = r.Stop.String(), r.Iterations, 2*r.Cost
	for k := range w.b.I {
		if w.b.W[k] != 0 {
			a.DoF += w.measured(k)
		}
	}
	a.DoF -= w.d * (len(w.p.Keys) - len(w.p.Anchors))
	if a.DoF > 0 {
		a.P = distuv.ChiSquared{K: float64(a.DoF)}.Survival(a.T)
	} else {
		a.DoF, a.P = 0, 1
	}
	return nil
}

// solve brings the graph to its optimum with the weights as they are, and the covariances with it.
func (w *work) solve() (posegraph.Result, error) {
	o := posegraph.DefaultOptions()
	o.Watch = func(int, float64, float64) bool { return w.ctx.Err() == nil }
	r := w.solver.Optimise(o)
	switch r.Stop {
	case posegraph.Interrupted:
		return r, w.ctx.Err()
	case posegraph.Undetermined:
		return r, fmt.Errorf("%w in some direction: %s, session %d", ErrUndetermined, keyframe(w.p.Keys[r.Weakest]), w.p.Keys[r.Weakest].Session)
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

// measured counts the components that a factor measures.
func (w *work) measured(k int) int {
	n := 0
	info := w.b.Info(k)
	for c := range w.d {
		if info[c*(w.d+1)] > 0 {
			n++
		}
	}
	return n
}

// residual returns the residual of a factor in the components of the survey.
func (w *work) residual(k int) []float64 {
	r := w.b.Residual(k, &w.p.Graph.Values)
	if w.d == 3 {
		return []float64{r[0], r[1], r[5]}
	}
	return r[:]
}

// predicted returns the covariance with which the map predicts the residual of a factor.
func (w *work) predicted(k int) []float64 {
	p := make([]float64, w.d*w.d)
	w.b.Predicted(k, &w.p.Graph.Values, w.sigma, p)
	return p
}

// turns is the number of the first component that is a rotation.
func (w *work) turns() int {
	if w.d == 3 {
		return 2
	}
	return 3
}

// components are the names of the components.
func (w *work) components() []string {
	if w.d == 3 {
		return []string{"x", "y", "rz"}
	}
	return []string{"x", "y", "z", "rx", "ry", "rz"}
}
