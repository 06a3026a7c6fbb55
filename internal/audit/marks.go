package audit

import (
	"math"
	"slices"

	"selvage/internal/posegraph"
	"selvage/internal/reliability"
	"selvage/internal/sparse"
	"selvage/internal/survey"
)

// Mark is what the audit says of a mark that ties sessions to each other, or of a control point.
type Mark struct {
	Mark      string   `json:"mark"`
	Role      string   `json:"role"`      // mark or control
	Sessions  []string `json:"seen_by"`   // in the adjustment
	Sightings int      `json:"sightings"` // in the adjustment
	LeftOut   int      `json:"left_out"`  // besides these

	Redundancy *float64 `json:"redundancy,omitempty"`                // of its sightings, mean over the measured components
	Worst      *float64 `json:"worst_normalised_residual,omitempty"` // of its sightings, sigmas

	Split   *Split   `json:"seen_elsewhere,omitempty"` // the session that differs most; missing where there are no two
	Control *Control `json:"control,omitempty"`
}

// Split is the test whether one session sees the mark at another place than all else has it.
type Split struct {
	Session string   `json:"session"`
	M       *float64 `json:"apart_m,omitempty"` // how far
	T       float64  `json:"statistic"`
	DoF     int      `json:"dof"`
	P       float64  `json:"p"`
	Failed  bool     `json:"failed"`
}

// Control is the test of the coordinates of a control point.
type Control struct {
	Status      Status   `json:"status"`            // contradicts where the coordinates are left out of the adjustment, for what was seen disagrees
	ApartM      *float64 `json:"apart_m,omitempty"` // from where all else has the mark
	T           *float64 `json:"statistic,omitempty"`
	DoF         int      `json:"dof"`
	P           *float64 `json:"p,omitempty"`
	Redundancy  *float64 `json:"redundancy,omitempty"`
	DetectableM *float64 `json:"detectable_m,omitempty"`
	LiesAt      string   `json:"lies_at,omitempty"` // another known place that is as good as met: they may be exchanged
	LiesAtM     *float64 `json:"lies_at_m,omitempty"`
	index       int      // into the list of all measurements, -1 where left out
}

// failed tells whether the mark shows a gross error.
func (m *Mark) failed() bool {
	return m.Split != nil && m.Split.Failed || m.Control != nil && (m.Control.Status == Failed || m.Control.Status == Contradicts)
}

// look is what one session saw of one point.
type look struct {
	unit int32
	all  []measurement
}

// testMarks fills in the figures of marks that several sessions have seen, and of control points.
func (w *work) testMarks() error {
	n := len(w.p.Points)
	looks := make([][]look, n)
	for i, m := range w.all {
		if w.sort[i] != sighting {
			continue
		}
		p, u := m.sights.To[m.k], w.unit[m.sights.From[m.k]]
		at := slices.IndexFunc(looks[p], func(l look) bool { return l.unit == u })
		if at < 0 {
			at = len(looks[p])
			looks[p] = append(looks[p], look{unit: u})
		}
		looks[p][at].all = append(looks[p][at].all, m)
	}
	out := map[string]int{}
	for _, l := range w.out.LeftOut {
		out[l.Mark] += l.LeftOut
	}
	held := map[int]int{} // point -> measurement
	for i, m := range w.all {
		if w.sort[i] == control {
			held[int(m.priors.Point(m.k))] = i
		}
	}
	var jobs []splitJob
	told := map[int]bool{} // marks
	for p := range n {
		mark := w.p.Points[p].Mark
		prior, isHeld := held[p]
		isControl := w.s.Marks[mark].Role == survey.ControlPoint
		if len(looks[p]) < 2 && !isControl {
			continue
		}
		m := Mark{Mark: w.s.Marks[mark].Name, Role: w.s.Marks[mark].Role.String()}
		if !told[mark] { // islands may have it as points of their own
			m.LeftOut = out[m.Mark]
			told[mark] = true
		}
		w.misfit(&m, looks[p])
		if isControl {
			m.Control = w.testControl(p, mark, prior, isHeld)
		}
		if len(looks[p]) > 1 {
			for i := range looks[p] {
				jobs = append(jobs, splitJob{mark: len(w.out.Marks), look: &looks[p][i]})
			}
		}
		w.out.Marks = append(w.out.Marks, m)
	}
	if err := w.splits(jobs); err != nil {
		return err
	}
	for _, mark := range w.wrong { // of which nothing is left
		if !told[mark] {
			name := w.s.Marks[mark].Name
			w.out.Marks = append(w.out.Marks, Mark{Mark: name, Role: survey.ControlPoint.String(), Sessions: []string{}, LeftOut: out[name],
				Control: &Control{Status: Contradicts, index: -1}})
		}
	}
	return nil
}

// misfit counts what was seen of a mark and how it fits.
func (w *work) misfit(m *Mark, looks []look) {
	sum, components, worst := 0.0, 0, math.NaN()
	for _, l := range looks {
		m.Sessions = append(m.Sessions, w.unitName(l.unit))
		m.Sightings += len(l.all)
		for _, s := range l.all {
			components += w.measured(s)
			if w.alone[w.index(s)] {
				continue
			}
			f := w.assess(s, w.residual(s))
			sum += f.Total()
			for _, x := range f.W {
				if a := math.Abs(x); a > worst || math.IsNaN(worst) {
					worst = a
				}
			}
		}
	}
	if components > 0 {
		mean := sum / float64(components)
		m.Redundancy = &mean
	}
	if !math.IsNaN(worst) {
		m.Worst = &worst
	}
}

// testControl tests the coordinates of a control point: as part of the adjustment, or against it where they are left out. It returns nil
// where they are not used, for the island has too few of them to lie in the datum.
func (w *work) testControl(point, mark, prior int, held bool) *Control {
	c := &Control{index: -1}
	if held {
		c.index = prior
		m := w.all[prior]
		f := w.assess(m, w.residual(m))
		mean := f.Total() / float64(max(1, w.measured(m)))
		c.Status, c.Redundancy, c.DoF = Unchecked, &mean, f.DoF
		if f.DoF == 0 || w.alone[prior] {
			c.DoF = 0
			return c
		}
		p := reliability.Survival(f.T, f.DoF)
		c.T, c.P, c.Status, c.DetectableM = &f.T, &p, Passed, largest(f.Detectable)
		if f.T > reliability.Bound(f.DoF) {
			c.Status = Failed
		}
		if apart, _ := w.lengths(m, f.Apart); !math.IsNaN(apart) {
			c.ApartM = &apart
		}
		return c
	}
	if !slices.Contains(w.wrong, mark) {
		return nil
	}
	n := w.turns()
	r, info := make([]float64, n), make([]float64, n*n)
	for i := range n {
		r[i] = w.p.Graph.Values.Points[point][i] - w.s.Marks[mark].T[i]
		if s := w.s.Marks[mark].Sigma[i]; !math.IsInf(s, 1) {
			info[i*(n+1)] = 1 / (s * s)
		}
	}
	apart := 0.0
	for i := range n {
		if info[i*(n+1)] > 0 {
			apart = math.Hypot(apart, r[i])
		}
	}
	q := w.sigma.Of(w.p.Graph.Point(int32(point)))
	cov := make([]float64, 0, n*n)
	for i := range n {
		cov = append(cov, q[3*i:3*i+n]...)
	}
	t, dof := reliability.Judge(r, info, cov)
	p := reliability.Survival(t, dof)
	c.ApartM, c.T, c.DoF, c.P, c.Status = &apart, &t, dof, &p, Fits
	c.LiesAt, c.LiesAtM = w.liesAt(point, mark, apart)
	if t > reliability.Bound(dof) {
		c.Status = Contradicts
	}
	return c
}

// liesAt names the mark of known place that a point is nearest to, if it is ten times nearer than to its own coordinates.
func (w *work) liesAt(point, mark int, apart float64) (name string, m *float64) {
	at, best := w.p.Graph.Values.Points[point], apart/10
	for k := range w.s.Marks {
		x := &w.s.Marks[k]
		if k == mark || x.Role == survey.PlainMark {
			continue
		}
		d := 0.0
		for c := range w.turns() {
			if !math.IsInf(x.Sigma[c], 1) {
				d = math.Hypot(d, at[c]-x.T[c])
			}
		}
		if d < best {
			best, name, m = d, x.Name, &d
		}
	}
	return name, m
}

// splitJob tests whether one session sees a mark elsewhere than all else has it.
type splitJob struct {
	mark int // of the audit
	look *look

	a, g, seen []float64 // see [reliability.Hypothesis], the parameters being the shift of the place seen
}

// splits tests the sessions of all marks, as many as there is room for, and notes for each mark the session that differs most.
func (w *work) splits(jobs []splitJob) error {
	n := w.turns()
	together := sparse.Together / n
	room := int(followed) / max(1, w.sigma.Scalars()*n)
	w.out.unsplit = len(jobs) > room
	jobs = jobs[:min(len(jobs), room)]
	for len(jobs) > 0 {
		if err := w.ctx.Err(); err != nil {
			return err
		}
		batch := jobs[:min(len(jobs), together)]
		jobs = jobs[len(batch):]
		var loads []posegraph.Load // J' Omega C
		for k := range batch {
			loads = w.shift(&batch[k], k*n, loads)
		}
		at := map[int32][]posegraph.Load{}
		for _, l := range loads {
			at[l.Variable] = append(at[l.Variable], l)
		}
		w.sigma.Respond(len(batch)*n, loads, func(v int32, x []float64) {
			for _, l := range at[v] {
				j, c := &batch[l.Column/n], l.Column%n
				row := x[l.Scalar*sparse.Together+l.Column-c:]
				for e := range n {
					j.seen[c*n+e] -= l.Value * row[e]
				}
			}
		})
		for k := range batch {
			j := &batch[k]
			t, dof, shift := reliability.Hypothesis(j.a, j.seen, j.g)
			if dof == 0 { // nothing else says where it is
				continue
			}
			s := &Split{Session: w.unitName(j.look.unit), T: t, DoF: dof, P: reliability.Survival(t, dof), Failed: t > reliability.Bound(dof)}
			if shift != nil {
				m := 0.0
				for _, x := range shift {
					m = math.Hypot(m, x)
				}
				s.M = &m
			}
			if m := &w.out.Marks[j.mark]; m.Split == nil || s.excess() > m.Split.excess() {
				m.Split = s
			}
		}
	}
	return nil
}

// shift fills in what a session saw of a mark, with C the derivative by the place seen, and appends J' Omega C from a column on.
func (w *work) shift(j *splitJob, column int, loads []posegraph.Load) []posegraph.Load {
	n := w.turns()
	j.a, j.g = make([]float64, n*n), make([]float64, n)
	for _, m := range j.look.all {
		d, info, r := w.derivative(m), w.info(m), w.residual(m)
		k := d.rows
		oc := make([]float64, k*n) // Omega C
		for i := range k {
			for c := range n {
				for l := range k {
					oc[i*n+c] += info[i*k+l] * d.by[1][3*l+c]
				}
			}
		}
		for i := range k {
			for c := range n {
				j.g[c] += oc[i*n+c] * r[i]
				for e := range n {
					j.a[c*n+e] += d.by[1][3*i+c] * oc[i*n+e]
				}
			}
		}
		for e, by := range d.by {
			width := len(by) / k
			for a := range width {
				for c := range n {
					value := 0.0
					for i := range k {
						value += by[i*width+a] * oc[i*n+c]
					}
					loads = append(loads, posegraph.Load{Variable: d.at[e], Scalar: a, Column: column + c, Value: value})
				}
			}
		}
	}
	j.seen = slices.Clone(j.a)
	return loads
}
