package scenarios

import (
	"fmt"
	"math"

	"selvage/internal/report"
	"selvage/internal/survey"
	"selvage/msgs"
)

// closureKey names what a loop closure joins; nth counts those that join the same.
type closureKey struct {
	session  uint32
	from, to int64
	nth      int
}

// closureVerdicts returns, for each robot and each of its relative poses, whether its agent has it in its map: held, as all odometry
// is, refused or open; zero for a loop closure that was not delivered.
func (r *Run) closureVerdicts() [][]msgs.VerdictKind {
	out := make([][]msgs.VerdictKind, len(r.Agents))
	r.eachClosure(func(robot, row int, v *survey.ResultClosure, verdict msgs.VerdictKind) {
		for len(out[robot]) < row {
			out[robot] = append(out[robot], msgs.Held)
		}
		out[robot] = append(out[robot], verdict)
	})
	for i := range out {
		for len(out[i]) < len(r.Outing.Survey.Robots[i].Relatives) {
			out[i] = append(out[i], msgs.Held)
		}
	}
	return out
}

// eachClosure visits the loop closures of the survey, with what the agents found; verdict is zero for those not delivered.
func (r *Run) eachClosure(visit func(robot, row int, v *survey.ResultClosure, verdict msgs.VerdictKind)) {
	for i, a := range r.Agents {
		robot := &r.Outing.Survey.Robots[i]
		count := map[closureKey]int{}
		name := func(session uint32, from, to int64) closureKey {
			k := closureKey{session: session, from: from, to: to}
			count[k]++
			k.nth = count[k]
			return k
		}
		found := map[closureKey]survey.ResultClosure{}
		verdict := map[closureKey]msgs.VerdictKind{}
		for _, c := range a.Closures() {
			k := name(c.Session, c.From, c.To)
			v := survey.ResultClosure{Reason: c.Reason, ChiSquare: math.NaN()}
			if c.DoF > 0 && !math.IsInf(c.Statistic, 0) {
				v.ChiSquare, v.DoF, v.Threshold = c.Statistic, c.DoF, c.Limit
			}
			found[k], verdict[k] = v, c.Verdict
		}
		clear(count)
		for row := range robot.Relatives {
			m := &robot.Relatives[row]
			if m.Kind != survey.Closure {
				continue
			}
			k := name(m.Session, m.From, m.To)
			v, known := found[k]
			kind := verdict[k]
			switch {
			case r.HoldAll:
				kind, v = msgs.Held, survey.ResultClosure{Reason: "taken as true", ChiSquare: math.NaN()}
			case !known:
				v = survey.ResultClosure{Reason: "not yet delivered when the run ended", ChiSquare: math.NaN()}
			}
			v.Robot, v.Session, v.From, v.To, v.Verdict = robot.ID, m.Session, m.From, m.To, wordOf(kind)
			visit(i, row, &v, kind)
		}
	}
}

// wordOf returns the word for a verdict, open for what nobody has judged.
func wordOf(v msgs.VerdictKind) string {
	switch v {
	case msgs.Held:
		return report.Held
	case msgs.Refused:
		return report.Refused
	}
	return report.Open
}

// Closures returns the finding on every loop closure, robot by robot in the order of the survey.
func (r *Run) Closures() []survey.ResultClosure {
	var out []survey.ResultClosure
	r.eachClosure(func(_, _ int, v *survey.ResultClosure, _ msgs.VerdictKind) { out = append(out, *v) })
	return out
}

// countClosures counts the loop closures that were delivered.
func (r *Run) countClosures(out *Score) {
	truth := r.Outing.ClosureTrue
	if truth != nil {
		out.Closures.True, out.Closures.False = &Verdicts{}, &Verdicts{}
	}
	r.eachClosure(func(robot, row int, _ *survey.ResultClosure, v msgs.VerdictKind) {
		if v == 0 {
			return
		}
		out.Closures.All.add(v)
		out.Robots[robot].Closures.add(v)
		if truth != nil && truth[robot][row] {
			out.Closures.True.add(v)
		} else if truth != nil {
			out.Closures.False.add(v)
		}
	})
}

// closureTables is empty where no loop closure was delivered.
func (s *Score) closureTables() []report.Table {
	c := &s.Closures
	if c.All == (Verdicts{}) {
		return nil
	}
	t := report.Table{
		Caption: "Loop closures by verdict",
		Columns: []report.Column{{Name: "loop closures"}, {Name: "held", Right: true}, {Name: "refused", Right: true}, {Name: "open", Right: true}},
		File:    "closures.csv",
	}
	row := func(name string, v *Verdicts) {
		t.Rows = append(t.Rows, []string{name, fmt.Sprint(v.Held), fmt.Sprint(v.Refused), fmt.Sprint(v.Open)})
	}
	row("all", &c.All)
	if c.True != nil {
		row("true", c.True)
		row("false", c.False)
	}
	for i := range s.Robots {
		row("of "+s.Robots[i].ID, &s.Robots[i].Closures)
	}
	return []report.Table{t}
}

// misled lists the robots whose agents refused loop closures.
func misled(s *Score) []string {
	var out []string
	for i := range s.Robots {
		x := &s.Robots[i]
		if n := x.Closures.Refused; n > 0 {
			out = append(out, fmt.Sprintf("Robot %s: %s of %d refused by its agent, because other measurements of the robot contradict them; see closures.csv.",
				x.ID, count(n, "loop closure"), n+x.Closures.Held+x.Closures.Open))
		}
	}
	return out
}
