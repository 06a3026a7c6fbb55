package audit

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/reliability"
	"selvage/internal/survey"
)

// draw makes a pose of the survey near one, moved by sigmas.
func drawPose(r *rand.Rand, x lie.SE3, dim int, t, turn float64) lie.SE3 {
	xi := lie.Tangent{t * r.NormFloat64(), t * r.NormFloat64(), 0, 0, 0, turn * r.NormFloat64()}
	if dim == 3 {
		xi[2], xi[3], xi[4] = t*r.NormFloat64(), turn*r.NormFloat64(), turn*r.NormFloat64()
	}
	return x.Plus(xi)
}

// random makes a survey of three robots with ties and closures; every tie has a verdict.
func random(r *rand.Rand, dim int, noise float64) (*survey.Survey, []survey.ResultVerdict) {
	const (
		steps  = 12
		t, phi = 0.05, 0.01
	)
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "random", Dimension: dim, Datum: survey.Datum{Name: "d"}}}
	truth := map[adjust.Key]lie.SE3{}
	cov := survey.Uncorrelated(t, phi)
	measured := func(a, b lie.SE3) survey.Pose {
		z := drawPose(r, a.Between(b), dim, noise*t, noise*phi)
		if dim == 2 {
			z = lie.Planar(&z).Spatial()
		}
		return adjust.Folder(&z)
	}
	for i := range 3 {
		robot := survey.Robot{ID: fmt.Sprintf("r%d", i)}
		x := drawPose(r, lie.Identity(), dim, 3, 1)
		for k := range int64(steps) {
			truth[adjust.Key{Robot: robot.ID, ID: k}] = x
			robot.Keyframes = append(robot.Keyframes, survey.Keyframe{ID: k, Pose: adjust.Folder(&x)})
			x = drawPose(r, x.Plus(lie.Tangent{1}), dim, 0.1, 0.2)
		}
		at := func(k int64) lie.SE3 { return truth[adjust.Key{Robot: robot.ID, ID: k}] }
		for k := range int64(steps - 1) {
			robot.Relatives = append(robot.Relatives, survey.Relative{From: k, To: k + 1, Pose: measured(at(k), at(k+1)), Cov: cov})
		}
		if i != 1 {
			robot.Relatives = append(robot.Relatives, survey.Relative{From: 1, To: 9, Kind: survey.Closure, Pose: measured(at(1), at(9)), Cov: cov})
		}
		s.Robots = append(s.Robots, robot)
	}
	var verdicts []survey.ResultVerdict
	tie := func(a, b int, verdict string) {
		from, to := adjust.Key{Robot: s.Robots[a].ID, ID: int64(r.IntN(steps))}, adjust.Key{Robot: s.Robots[b].ID, ID: int64(r.IntN(steps))}
		id := fmt.Sprintf("t%d", len(s.Ties))
		s.Ties = append(s.Ties, survey.Tie{ID: id, FromRobot: from.Robot, FromKey: from.ID, ToRobot: to.Robot, ToKey: to.ID, Pose: measured(truth[from], truth[to]), Cov: cov})
		verdicts = append(verdicts, survey.ResultVerdict{Tie: id, Verdict: verdict, Reason: "drawn"})
	}
	for range 2 + r.IntN(3) {
		tie(0, 1, "held")
	}
	for range 1 + r.IntN(2) {
		tie(2, 1, "held")
	}
	tie(0, 2, "refused")
	return s, verdicts
}

// solved adjusts with what is held.
func solved(t *testing.T, s *survey.Survey, held func(int) bool) *adjust.Problem {
	t.Helper()
	p, err := adjust.New(s, held)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(adjust.Auto); err != nil {
		t.Fatal(err)
	}
	if err := p.Analyse(1); err != nil {
		t.Fatal(err)
	}
	if r := p.Solve(posegraph.DefaultOptions()); r.Stop != posegraph.Converged {
		t.Fatal(r.Stop)
	}
	return p
}

// Everything that is read from the factor, against adjusting again: leave-one-out and its test, shifts, the tests of ties that are not
// held, what a candidate would do; the sum of all redundancies is the number of degrees of freedom. The noise is so small that
// first order is all there is.
func TestAgainstAdjustingAgain(t *testing.T) {
	const noise = 1e-4
	checked, candidatesSeen := 0, 0
	for seed := range uint64(12) {
		r := rand.New(rand.NewPCG(seed, 77))
		dim := 2 + int(seed%2)
		s, verdicts := random(r, dim, noise)
		in := Input{Survey: s, Verdicts: verdicts, Decided: "the test"}
		w := &work{ctx: t.Context(), in: &in, s: s}
		for _, do := range []func() error{w.build, w.adjust, w.search, w.test, w.effects} {
			if err := do(); err != nil {
				t.Fatal(err)
			}
		}
		sum := 0.0
		for _, m := range w.all {
			f := w.assess(m, w.residual(m))
			sum += f.Total()
		}
		near(t, "sum of redundancies", sum, float64(w.out.Adjustment.DoF), 1e-6)

		for k := range w.out.Ties {
			x := &w.out.Ties[k]
			others := solved(t, s, func(i int) bool { return verdicts[i].Verdict == "held" && i != k })
			i, j := others.Var[adjust.Key{Robot: x.From.Robot, ID: x.From.Key}], others.Var[adjust.Key{Robot: x.To.Robot, ID: x.To.Key}]
			joined := others.Island[i] == others.Island[j]
			if x.held && joined == (x.Status == Unchecked) || x.held && x.Bridge == joined {
				t.Errorf("seed %d, %s: %s, bridge %v, but joined without it: %v", seed, x.ID, x.Status, x.Bridge, joined)
			}
			if !joined {
				continue
			}
			checked++
			info, err := s.Ties[k].Cov.Information(dim)
			if err != nil {
				t.Fatal(err)
			}
			g := posegraph.New(w.d, others.Graph.Values.Poses)
			b := g.AddBetween()
			b.Add(i, j, adjust.Pose(s.Ties[k].Pose), &info)
			apart := b.Residual(0, &g.Values)
			m := math.Sqrt(apart[0]*apart[0] + apart[1]*apart[1] + apart[2]*apart[2])
			near(t, x.ID+" leave-one-out, m", *x.ApartM/noise, m/noise, 2e-3*m/noise+1e-6)
			// The test, with the joint covariance by solutions of its own.
			joint, err := others.Solver().Joint([]int32{i, j})
			if err != nil {
				t.Fatal(err)
			}
			ji, jj := make([]float64, w.d*w.d), make([]float64, w.d*w.d)
			b.Jacobians(0, &g.Values, ji, jj)
			jac := mat.NewDense(w.d, 2*w.d, nil)
			for a := range w.d {
				for c := range w.d {
					jac.Set(a, c, ji[a*w.d+c])
					jac.Set(a, w.d+c, jj[a*w.d+c])
				}
			}
			var jq, p mat.Dense
			jq.Mul(jac, mat.NewDense(2*w.d, 2*w.d, joint))
			p.Mul(&jq, jac.T())
			res := apart[:]
			if dim == 2 {
				res = []float64{apart[0], apart[1], apart[5]}
			}
			stat, dof := reliability.Judge(res, b.Info(0), p.RawMatrix().Data)
			near(t, x.ID+" T", *x.T/noise/noise, stat/noise/noise, 5e-3*stat/noise/noise)
			if dof != x.DoF || x.AtLeast {
				t.Errorf("%s: %d degrees of freedom, want %d; only a bound: %v", x.ID, x.DoF, dof, x.AtLeast)
			}
			if x.held {
				shifted(t, s, verdicts, w, k)
			}
		}
		candidatesSeen += tryNext(t, s, verdicts, w)
	}
	if checked < 20 || candidatesSeen < 3 {
		t.Errorf("only %d ties and %d candidates were checked", checked, candidatesSeen)
	}
}

// shifted puts an error into a tie and compares how far the map moves with what was said, scaled down to stay linear.
func shifted(t *testing.T, s *survey.Survey, verdicts []survey.ResultVerdict, w *work, k int) {
	t.Helper()
	x := &w.out.Ties[k]
	c := slices.Index(x.Parts, x.Shift.Component)
	const part = 1e-4
	size := float64(x.Detectable[c]) * part
	other := *s
	other.Ties = slices.Clone(s.Ties)
	var xi lie.Tangent
	if w.d == 3 {
		xi[[3]int{0, 1, 5}[c]] = size
	} else {
		xi[c] = size
	}
	z := adjust.Pose(s.Ties[k].Pose).Plus(xi)
	other.Ties[k].Pose = adjust.Folder(&z)
	held := func(i int) bool { return verdicts[i].Verdict == "held" }
	before := solved(t, s, held)
	after := solved(t, &other, held)
	most, at := 0.0, 0
	for v := range before.Keys {
		if d := distance(before.Graph.Values.Poses[v].T, after.Graph.Values.Poses[v].T); d > most {
			most, at = d, v
		}
	}
	near(t, x.ID+" shift", x.Shift.M, most/part, 2e-3*x.Shift.M)
	if got := keyframe(before.Keys[at]); got != *x.Shift.At {
		d := distance(before.Graph.Values.Poses[before.Var[keyOf(*x.Shift.At)]].T, after.Graph.Values.Poses[before.Var[keyOf(*x.Shift.At)]].T)
		if d < most*(1-1e-3) {
			t.Errorf("%s: %v moves most, want %v", x.ID, *x.Shift.At, got)
		}
	}
	if most := x.effect * w.largestSigmas()[0]; x.Shift.M > most*(1+1e-9) {
		t.Errorf("%s: shift %g above the bound %g", x.ID, x.Shift.M, most)
	}
}

func keyOf(k Keyframe) adjust.Key { return adjust.Key{Robot: k.Robot, Session: k.Session, ID: k.Key} }

// tryNext adds the candidates for real and compares the detectable errors.
func tryNext(t *testing.T, s *survey.Survey, verdicts []survey.ResultVerdict, w *work) int {
	t.Helper()
	if err := w.next(); err != nil {
		t.Fatal(err)
	}
	seen := 0
	for _, c := range w.out.Next {
		other := *s
		i, j := w.p.Var[keyOf(c.A)], w.p.Var[keyOf(c.B)]
		z := w.p.Graph.Values.Poses[i].Between(w.p.Graph.Values.Poses[j])
		if w.d == 3 {
			z = lie.Planar(&z).Spatial()
		}
		other.Ties = append(slices.Clone(s.Ties), survey.Tie{ID: "new", FromRobot: c.A.Robot, FromKey: c.A.Key, ToRobot: c.B.Robot, ToKey: c.B.Key, Pose: adjust.Folder(&z), Cov: s.Ties[0].Cov})
		with := append(slices.Clone(verdicts), survey.ResultVerdict{Tie: "new", Verdict: "held"})
		a := run(t, &other, with)
		for k := range a.Ties {
			if x := &a.Ties[k]; x.ID == c.Helps {
				seen++
				if x.DetectableM == nil {
					t.Errorf("%s is still unchecked with %+v", x.ID, c)
					continue
				}
				near(t, "detectable error of "+x.ID+" then", c.AfterM, *x.DetectableM, 1e-3*c.AfterM)
			}
		}
	}
	return seen
}
