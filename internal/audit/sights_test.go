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

// sighted is a survey of random with marks that robots have seen and ties of every kind, all held. Every third has control points.
func sighted(seed uint64, noise float64) (*survey.Survey, []survey.ResultVerdict) {
	return sightedMarks(seed, noise, 5)
}

// sightedMarks has so many marks; where there are control points, all but one are.
func sightedMarks(seed uint64, noise float64, marks int) (*survey.Survey, []survey.ResultVerdict) {
	r := rand.New(rand.NewPCG(seed, 78))
	dim := 2 + int(seed%2)
	s, _ := random(r, dim, noise)
	s.Ties = s.Ties[:1+seed%3]
	for i := range s.Robots {
		s.Meta.Robots = append(s.Meta.Robots, survey.RobotMeta{ID: s.Robots[i].ID, Mounting: []survey.Mount{{Name: "eye", Kind: "sensor", X: 0.2, Y: 0.1, QW: 1}, {Name: "tag", Kind: "target", X: -0.3, QW: 1}}})
	}
	eye, tag := [3]float64{0.2, 0.1, 0}, [3]float64{-0.3, 0, 0}
	at := func(robot int, k int64) lie.SE3 { return adjust.Pose(s.Robots[robot].Keyframes[k].Pose) }
	kinds := []survey.Kind{survey.RangeBearing, survey.Position, survey.Bearing, survey.Range}
	sight := func(kind survey.Kind, x lie.SE3, p [3]float64) survey.Sight {
		q := x.Inv().Apply(p)
		for c := range q {
			q[c] -= eye[c]
		}
		flat := math.Hypot(q[0], q[1])
		e := survey.Sight{Sensor: "eye", Sigma: survey.Unmeasured}
		value, sigma := [3]float64{math.Hypot(flat, q[2]), math.Atan2(q[1], q[0]), math.Atan2(q[2], flat)}, [3]float64{0.05, 0.01, 0.02}
		if kind == survey.Position {
			value, sigma = q, [3]float64{0.05, 0.04, 0.06}
			e.Corr[0] = 0.3
		}
		for c := range 3 {
			if c == 2 && dim == 2 || kind == survey.Range && c > 0 || kind == survey.Bearing && c == 0 {
				continue
			}
			e.Sigma[c], e.Value[c] = sigma[c], value[c]+noise*sigma[c]*r.NormFloat64()
		}
		return e
	}
	for k := range marks {
		p := [3]float64{10*r.Float64() - 2, 10*r.Float64() - 5, 0}
		if dim == 3 {
			p[2] = 4*r.Float64() - 2
		}
		m := survey.Mark{Name: fmt.Sprint("m", k)}
		if seed%3 == 0 && k < marks-1 {
			m.Role, m.Sigma = survey.ControlPoint, [3]float64{0.05, 0.05, 0.05}
			for c := range dim {
				m.T[c] = p[c] + noise*m.Sigma[c]*r.NormFloat64()
			}
			if dim == 2 {
				m.Sigma[2] = math.Inf(1)
			}
		}
		s.Marks = append(s.Marks, m)
		for i := range s.Robots {
			for n := range 4 { // the first of a robot places the mark
				kind := kinds[r.IntN(len(kinds))]
				if n == 0 {
					kind = kinds[r.IntN(2)]
				}
				key := int64(r.IntN(12))
				s.Robots[i].Sightings = append(s.Robots[i].Sightings, survey.Sighting{Key: key, Mark: m.Name, Kind: kind, Sight: sight(kind, at(i, key), p)})
			}
		}
	}
	for k := range 8 {
		i, j := k%3, (k+1+r.IntN(2))%3
		from, to := int64(r.IntN(12)), int64(r.IntN(12))
		kind := kinds[k%len(kinds)]
		e := sight(kind, at(i, from), at(j, to).Apply(tag))
		e.Target = "tag"
		s.Ties = append(s.Ties, survey.Tie{ID: fmt.Sprint("s", k), FromRobot: s.Robots[i].ID, FromKey: from, ToRobot: s.Robots[j].ID, ToKey: to, Kind: kind, Sight: e})
	}
	var verdicts []survey.ResultVerdict
	for k := range s.Ties {
		verdicts = append(verdicts, survey.ResultVerdict{Tie: s.Ties[k].ID, Verdict: "held"})
	}
	return s, verdicts
}

// adjusted adjusts everything but some ties, from the poses given.
func adjusted(t *testing.T, s *survey.Survey, held func(int) bool) *work {
	t.Helper()
	p, err := adjust.NewWithEnds(s, held)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(adjust.Given); err != nil {
		t.Fatal(err)
	}
	if err := p.Analyse(1); err != nil {
		t.Fatal(err)
	}
	if r := p.Solve(posegraph.DefaultOptions()); r.Stop != posegraph.Converged {
		t.Fatal(r.Stop)
	}
	w := &work{ctx: t.Context(), in: &Input{Survey: s}, s: s, p: p, b: p.Factors, d: p.Graph.Dim, solver: p.Solver()}
	w.out.Dimension = s.Meta.Dimension
	w.out.Ties = make([]Tie, len(s.Ties))
	w.findUnits()
	w.list()
	if err := w.covariance(); err != nil {
		t.Fatal(err)
	}
	return w
}

// phases runs the audit up to the shifts.
func phases(t *testing.T, s *survey.Survey, verdicts []survey.ResultVerdict) *work {
	t.Helper()
	in := Input{Survey: s, Verdicts: verdicts, Decided: "the test"}
	w := &work{ctx: t.Context(), in: &in, s: s}
	for _, do := range []func() error{w.build, w.adjust, w.search, w.test, w.testMarks, w.effects} {
		if err := do(); err != nil {
			t.Fatal(err)
		}
	}
	return w
}

// dense is J Q J' of a measurement by the joint covariance of all variables, solved for.
func dense(t *testing.T, w *work, d derivative) []float64 {
	t.Helper()
	variables := []int32{d.at[0]}
	if d.at[1] >= 0 {
		variables = append(variables, d.at[1])
	}
	joint, err := w.solver.Joint(variables)
	if err != nil {
		t.Fatal(err)
	}
	wide := 0
	for e := range variables {
		wide += len(d.by[e]) / d.rows
	}
	j := mat.NewDense(d.rows, wide, nil)
	from := 0
	for e := range variables {
		width := len(d.by[e]) / d.rows
		for r := range d.rows {
			for c := range width {
				j.Set(r, from+c, d.by[e][r*width+c])
			}
		}
		from += width
	}
	var jq, p mat.Dense
	jq.Mul(j, mat.NewDense(wide, wide, joint))
	p.Mul(&jq, j.T())
	return p.RawMatrix().Data
}

// Marks, control points and ties of every kind, in the plane and in space: what is read from the factor against adjusting again
// without the measurement, or with an error in it. The sum of all redundancies is the number of degrees of freedom.
func TestSightsAgainstAdjustingAgain(t *testing.T) {
	const noise = 1e-4
	kinds, controls, splits := map[string]int{}, 0, 0
	for seed := range uint64(6) {
		s, verdicts := sighted(seed, noise)
		w := phases(t, s, verdicts)
		if w.p.Islands != 1 || len(w.out.LeftOut) > 0 {
			t.Fatalf("seed %d: %d islands, left out %+v", seed, w.p.Islands, w.out.LeftOut)
		}
		if n := len(w.p.Anchors); (n == 0) != (seed%3 == 0) {
			t.Errorf("seed %d: %d keyframes held", seed, n)
		}
		sum := 0.0
		for _, m := range w.all {
			f := w.assess(m, w.residual(m))
			sum += f.Total()
		}
		near(t, "sum of redundancies", sum, float64(w.out.Adjustment.DoF), 1e-5)
		for k := range w.out.Ties {
			x := &w.out.Ties[k]
			what := fmt.Sprintf("seed %d, %s (%s)", seed, x.ID, x.Kind)
			if !x.held || x.T == nil {
				t.Errorf("%s: held %v, %s", what, x.held, x.Status)
				continue
			}
			kinds[x.Kind]++
			others := adjusted(t, s, func(i int) bool { return i != k })
			m, err := others.outside(k)
			if err != nil {
				t.Fatal(err)
			}
			apart := others.residual(m)
			metres, rad := others.lengths(m, apart)
			if x.ApartM != nil {
				near(t, what+" leave-one-out, m", *x.ApartM/noise, metres/noise, 5e-3*metres/noise+1e-6)
			}
			if x.ApartRad != nil {
				near(t, what+" leave-one-out, rad", *x.ApartRad/noise, rad/noise, 5e-3*rad/noise+1e-6)
			}
			stat, dof := reliability.Judge(apart, others.info(m), dense(t, others, others.derivative(m)))
			near(t, what+" T", *x.T/noise/noise, stat/noise/noise, 1e-2*stat/noise/noise)
			if dof != x.DoF {
				t.Errorf("%s: %d degrees of freedom, want %d", what, x.DoF, dof)
			}
			moved(t, what, s, w, k)
		}
		for k := range w.out.Marks {
			m := &w.out.Marks[k]
			if m.Control != nil {
				controls++
				controlAgain(t, s, m, noise)
			}
			if m.Split == nil {
				t.Errorf("seed %d: mark %s is not tested", seed, m.Mark)
				continue
			}
			splits++
			splitAgain(t, s, m, noise)
		}
	}
	for _, kind := range []survey.Kind{survey.WholePose, survey.RangeBearing, survey.Position, survey.Bearing, survey.Range} {
		if kinds[kind.String()] < 6 {
			t.Errorf("only %d ties of kind %s", kinds[kind.String()], kind)
		}
	}
	if controls < 6 || splits < 20 {
		t.Errorf("only %d control points and %d marks", controls, splits)
	}
}

// moved puts a part of the detectable error into each component of a tie: its normalised residual has to change by that part of the
// distance at which the test has its power, and the map has to move as was said.
func moved(t *testing.T, what string, s *survey.Survey, w *work, k int) {
	t.Helper()
	const part = 1e-3
	all := func(int) bool { return true }
	x := &w.out.Ties[k]
	before := adjusted(t, s, all)
	worst := 0.0
	for c, part3 := range w.parts(x.m) {
		if math.IsNaN(float64(x.Detectable[c])) {
			continue
		}
		size := part * float64(x.Detectable[c])
		other := *s
		other.Ties = slices.Clone(s.Ties)
		if x.m.poses != nil {
			xi := lie.Tangent{}
			xi[part3] = size
			z := adjust.Pose(s.Ties[k].Pose).Plus(xi)
			other.Ties[k].Pose = adjust.Folder(&z)
		} else {
			other.Ties[k].Sight.Value[part3] += size
		}
		after := adjusted(t, &other, all)
		m := before.out.Ties[k].m
		one := before.assess(m, before.residual(m))
		m = after.out.Ties[k].m
		two := after.assess(m, after.residual(m))
		near(t, fmt.Sprintf("%s: test of component %d moved by", what, c), (one.W[c]-two.W[c])/part, reliability.Delta, 5e-3*reliability.Delta)
		for v := range before.p.Keys {
			worst = max(worst, distance(before.p.Graph.Values.Poses[v].T, after.p.Graph.Values.Poses[v].T)/part)
		}
	}
	near(t, what+" shift", x.Shift.M, worst, 1e-2*worst)
	if most := x.effect * w.largestSigmas()[0]; x.Shift.M > most*(1+1e-9) {
		t.Errorf("%s: shift %g above the bound %g", what, x.Shift.M, most)
	}
}

// controlAgain adjusts with the control point as a plain mark.
func controlAgain(t *testing.T, s *survey.Survey, m *Mark, noise float64) {
	t.Helper()
	other := *s
	other.Marks = slices.Clone(s.Marks)
	k := slices.IndexFunc(other.Marks, func(x survey.Mark) bool { return x.Name == m.Mark })
	known := other.Marks[k]
	other.Marks[k] = survey.Mark{Name: known.Name}
	w := adjusted(t, &other, func(int) bool { return true })
	point := slices.IndexFunc(w.p.Points, func(x adjust.Point) bool { return x.Mark == k })
	dim := s.Meta.Dimension
	joint, err := w.solver.Joint([]int32{w.p.Graph.Point(int32(point))})
	if err != nil {
		t.Fatal(err)
	}
	r, info, q := make([]float64, dim), make([]float64, dim*dim), make([]float64, 0, dim*dim)
	apart := 0.0
	for i := range dim {
		r[i] = w.p.Graph.Values.Points[point][i] - known.T[i]
		apart = math.Hypot(apart, r[i])
		info[i*(dim+1)] = 1 / (known.Sigma[i] * known.Sigma[i])
		q = append(q, joint[3*i:3*i+dim]...)
	}
	stat, dof := reliability.Judge(r, info, q)
	near(t, m.Mark+" T as a control point", *m.Control.T/noise/noise, stat/noise/noise, 1e-2*stat/noise/noise)
	near(t, m.Mark+" apart", *m.Control.ApartM/noise, apart/noise, 1e-2*apart/noise)
	if dof != m.Control.DoF {
		t.Errorf("%s: %d degrees of freedom, want %d", m.Mark, m.Control.DoF, dof)
	}
}

// splitAgain adjusts with the mark that one session saw as a mark of its own.
func splitAgain(t *testing.T, s *survey.Survey, m *Mark, noise float64) {
	t.Helper()
	other := *s
	k := slices.IndexFunc(s.Marks, func(x survey.Mark) bool { return x.Name == m.Mark })
	other.Marks = append(slices.Clone(s.Marks), survey.Mark{Name: "apart"})
	other.Robots = slices.Clone(s.Robots)
	for i := range other.Robots {
		if r := &other.Robots[i]; r.ID == m.Split.Session {
			r.Sightings = slices.Clone(r.Sightings)
			for n := range r.Sightings {
				if r.Sightings[n].Mark == m.Mark {
					r.Sightings[n].Mark = "apart"
				}
			}
		}
	}
	w := adjusted(t, &other, func(int) bool { return true })
	find := func(mark int) int {
		return slices.IndexFunc(w.p.Points, func(x adjust.Point) bool { return x.Mark == mark })
	}
	a, b := find(k), find(len(s.Marks))
	joint, err := w.solver.Joint([]int32{w.p.Graph.Point(int32(a)), w.p.Graph.Point(int32(b))})
	if err != nil {
		t.Fatal(err)
	}
	dim := s.Meta.Dimension
	d, cov := mat.NewVecDense(dim, nil), mat.NewSymDense(dim, nil)
	for i := range dim {
		d.SetVec(i, w.p.Graph.Values.Points[a][i]-w.p.Graph.Values.Points[b][i])
		for j := i; j < dim; j++ {
			cov.SetSym(i, j, joint[6*i+j]+joint[6*(3+i)+3+j]-joint[6*i+3+j]-joint[6*(3+i)+j])
		}
	}
	var chol mat.Cholesky
	var x mat.VecDense
	if !chol.Factorize(cov) || chol.SolveVecTo(&x, d) != nil {
		t.Fatal("the difference of two points has no covariance")
	}
	stat := mat.Dot(d, &x)
	near(t, m.Mark+" T of being seen elsewhere", m.Split.T/noise/noise, stat/noise/noise, 2e-2*stat/noise/noise)
	near(t, m.Mark+" seen apart by", *m.Split.M/noise, mat.Norm(d, 2)/noise, 2e-2*mat.Norm(d, 2)/noise)
}
