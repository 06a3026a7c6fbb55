package audit

import (
	"fmt"
	"math"
	"slices"

	"selvage/internal/adjust"
	"selvage/internal/reliability"
	"selvage/internal/report"
	"selvage/internal/survey"
)

// Positions compares a map with the marks whose places in the datum were surveyed.
type Positions struct {
	Control []Position `json:"control_points"`
	Check   []Position `json:"check_points"` // took no part in the adjustment

	// Placed is how the map was put on the control points after an adjustment without them; nil where they took part in it.
	Placed *OnControl `json:"placed,omitempty"`

	X             *Axis     `json:"x,omitempty"` // of the check points
	Y             *Axis     `json:"y,omitempty"`
	Z             *Axis     `json:"z,omitempty"`
	RMSERadialM   *float64  `json:"rmse_radial_m,omitempty"`
	Horizontal95M *float64  `json:"horizontal_95_m,omitempty"` // by FGDC-STD-007.3-1998, whether or not it may be claimed
	Vertical95M   *float64  `json:"vertical_95_m,omitempty"`
	Doubts        []string  `json:"doubts"` // of single marks
	Statements    []Claimed `json:"statements"`
	Remarks       []string  `json:"remarks"`
}

// Position is a mark whose place was surveyed, as one island has it.
type Position struct {
	Mark      string    `json:"mark"`
	Island    int32     `json:"island"`
	At        []float64 `json:"at_m"`                         // adjusted, in the frame of the island
	Off       []Figure  `json:"adjusted_minus_surveyed_m"`    // none where the island stands in no datum
	DistanceM *float64  `json:"distance_m,omitempty"`         // over the coordinates that were surveyed
	Agrees    *bool     `json:"agrees_with_others,omitempty"` // of a control point that the map was placed on; false too where most of its sightings contradict it
	Sigma     []Figure  `json:"sigma_of_the_survey_m"`        // null where a coordinate was not surveyed
}

// OnControl is how the map lies on its control points.
type OnControl struct {
	Stands  bool     `json:"stands"` // in every island that has seen control points
	RMSEM   *float64 `json:"rmse_m,omitempty"`
	Counted int      `json:"counted"`
	Against []string `json:"contradict"` // named with the island where there are several
}

// Axis sums up the differences at check points along one axis, m.
type Axis struct {
	Points int    `json:"points"`
	Mean   Figure `json:"mean_m"`
	SD     Figure `json:"sd_m"`
	RMSE   Figure `json:"rmse_m"`
}

// Claimed is one line of the accuracy statement.
type Claimed struct {
	Text    string `json:"text"`
	Claimed bool   `json:"claimed"`
}

// positions places the map on its control points if asked to, and compares it with all marks of known place.
func (w *work) positions() error {
	var placed []adjust.Placed
	if w.in.Place {
		var err error
		if placed, err = w.p.Place(); err != nil {
			return fmt.Errorf("%w in some direction (%w)", ErrUndetermined, err)
		}
		if len(placed) == 0 {
			return ErrNoControl
		}
		if err := w.covariance(); err != nil {
			return err
		}
	}
	w.out.Positions = Compare(w.p, w.s, placed)
	return nil
}

// Compare compares the map of a problem that has been solved with the marks of known place; placed is what [adjust.Problem.Place]
// returned, nil where it was not called. It returns nil when the survey has no such mark.
func Compare(p *adjust.Problem, s *survey.Survey, placed []adjust.Placed) *Positions {
	marks := p.Landmarks()
	if !slices.ContainsFunc(s.Marks, func(m survey.Mark) bool { return m.Role != survey.PlainMark }) {
		return nil
	}
	out := &Positions{Control: []Position{}, Check: []Position{}, Doubts: []string{}, Statements: []Claimed{}, Remarks: []string{}}
	dim := s.Meta.Dimension
	var checks []reliability.CheckPoint
	for _, l := range marks {
		m := &s.Marks[l.Mark]
		x := Position{Mark: m.Name, Island: l.Island, At: l.At[:dim], Off: []Figure{}}
		for _, sigma := range m.Sigma[:dim] {
			if math.IsInf(sigma, 1) {
				sigma = math.NaN()
			}
			x.Sigma = append(x.Sigma, Figure(sigma))
		}
		if p.InDatum(l.Island) {
			squared := 0.0
			for _, d := range l.Off[:dim] {
				x.Off = append(x.Off, Figure(d))
				if !math.IsNaN(d) {
					squared += d * d
				}
			}
			distance := math.Sqrt(squared)
			x.DistanceM = &distance
		}
		if m.Role == survey.ControlPoint {
			x.Agrees = agrees(placed, l)
			out.Control = append(out.Control, x)
			continue
		}
		out.Check = append(out.Check, x)
		if x.DistanceM != nil {
			checks = append(checks, reliability.CheckPoint{At: l.At, Off: l.Off})
		}
	}
	if placed != nil {
		out.place(placed, s, p.Islands > 1)
	}
	out.doubt(p, s)
	out.assure(checks, p, s)
	return out
}

// agrees looks a control point up in what the map was placed on.
func agrees(placed []adjust.Placed, l adjust.Landmark) *bool {
	for i := range placed {
		if x := &placed[i]; x.Island == l.Island && x.Stands {
			for k, mark := range x.Marks {
				if mark == l.Mark {
					return &x.Agrees[k]
				}
			}
		}
	}
	return nil
}

// place sums up how the map lies on its control points.
func (x *Positions) place(placed []adjust.Placed, s *survey.Survey, several bool) {
	x.Placed = &OnControl{Stands: len(placed) > 0, Against: []string{}}
	sum := 0.0
	for _, on := range placed {
		x.Placed.Stands = x.Placed.Stands && on.Stands
		for k := range on.Off {
			if on.Agrees[k] {
				x.Placed.Counted++
				sum += on.Off[k] * on.Off[k]
				continue
			}
			name := s.Marks[on.Marks[k]].Name
			if several {
				name = fmt.Sprintf("%s in island %d", name, on.Island)
			}
			x.Placed.Against = append(x.Placed.Against, fmt.Sprintf("%s (%s m)", name, short(on.Off[k])))
		}
	}
	if x.Placed.Counted > 0 {
		rmse := math.Sqrt(sum / float64(x.Placed.Counted))
		x.Placed.RMSEM = &rmse
	}
}

// assure states what the check points say of the positions.
func (x *Positions) assure(checks []reliability.CheckPoint, p *adjust.Problem, s *survey.Survey) {
	if left := len(x.Check) - len(checks); left > 0 {
		x.Remarks = append(x.Remarks, fmt.Sprintf("%s in a map that is not in the datum, for %s: they say nothing of its positions.", isAre(left, "check point"), x.without()))
	}
	if len(checks) == 0 {
		return
	}
	a := reliability.Assure(checks, covered(p))
	level := s.Meta.Dimension == 2 || s.Meta.Datum.Level
	for _, axis := range []struct {
		to   **Axis
		from *reliability.Axis
	}{{&x.X, &a.X}, {&x.Y, &a.Y}, {&x.Z, &a.Z}} {
		if f := axis.from; f.N > 0 {
			*axis.to = &Axis{f.N, Figure(f.Mean), Figure(f.SD), Figure(f.RMSE)}
		}
	}
	present := func(v float64) *float64 {
		if math.IsNaN(v) || !level {
			return nil
		}
		return &v
	}
	x.RMSERadialM, x.Horizontal95M, x.Vertical95M = present(a.RMSER), present(a.Horizontal.M), present(a.Vertical.M)
	if !level {
		x.Statements = append(x.Statements, Claimed{Text: "No accuracy is claimed by FGDC-STD-007.3-1998: the datum is not declared level, so nothing tells what is horizontal"})
		return
	}
	for _, st := range []*reliability.Statement{&a.Horizontal, &a.Vertical} {
		if st.Text != "" {
			x.Statements = append(x.Statements, Claimed{st.Text, st.Claimed})
		}
	}
	x.Remarks = append(x.Remarks, a.Remarks...)
}

// covered returns the rectangle around all that lies in the datum.
func covered(p *adjust.Problem) reliability.Area {
	a := reliability.Area{Min: [2]float64{math.Inf(1), math.Inf(1)}, Max: [2]float64{math.Inf(-1), math.Inf(-1)}}
	extend := func(at [3]float64) {
		for c := range a.Min {
			a.Min[c], a.Max[c] = min(a.Min[c], at[c]), max(a.Max[c], at[c])
		}
	}
	for v := range p.Graph.Values.Poses {
		if p.InDatum(p.Island[v]) {
			extend(p.Graph.Values.Poses[v].T)
		}
	}
	for k := range p.Points {
		if p.InDatum(p.Points[k].Island) {
			extend(p.Graph.Values.Points[k])
		}
	}
	return a
}

// Lines says it in sentences: how the map lies on its control points, which marks are doubtful, then what may be said of its positions.
func (x *Positions) Lines() []string {
	var out []string
	switch on := x.Placed; {
	case on == nil:
	case !on.Stands && on.Counted == 0:
		out = append(out, fmt.Sprintf("The map could not be placed: of %s too few agree on one place.", count(len(x.Control), "control point")))
	default:
		line := fmt.Sprintf("The map was placed on %s after an adjustment without them, and meets them to %s m (RMSE).", count(on.Counted, "control point"), short(*on.RMSEM))
		if len(on.Against) > 0 {
			line += fmt.Sprintf(" %s %s the others and did not count.", list(on.Against), map[bool]string{true: "contradicts", false: "contradict"}[len(on.Against) == 1])
		}
		out = append(out, line)
		if !on.Stands {
			out = append(out, "Some islands could not be placed: too few of their control points agree on one place.")
		}
	}
	out = append(out, x.Doubts...)
	for _, s := range x.Statements {
		out = append(out, s.Text+".")
	}
	return append(out, x.Remarks...)
}

// without says why an island stands in no datum.
func (x *Positions) without() string {
	if len(x.Control) > 0 {
		return "too few control points hold it"
	}
	return "no control point was seen"
}

// Any tells whether a mark of known place was seen; x may be nil.
func (x *Positions) Any() bool { return x != nil && len(x.Control)+len(x.Check) > 0 }

// Table lists the marks of known place.
func (x *Positions) Table() report.Table {
	t := report.Table{
		Caption: "Marks of known place",
		Note:    "Differences are adjusted minus surveyed. Check points took no part in the adjustment.",
		Columns: []report.Column{{Name: "mark"}, {Name: "role"}},
	}
	switch {
	case x.Placed != nil:
		t.Note += " Nor did control points: the map was placed on them as a whole."
	case slices.ContainsFunc(x.Control, func(c Position) bool { return c.DistanceM != nil }):
		t.Note += " Control points hold the map: small differences there are no proof."
	}
	axes := []string{"x", "y", "z"}
	for _, all := range [][]Position{x.Control, x.Check} {
		if len(all) > 0 {
			axes = axes[:len(all[0].At)]
		}
	}
	for _, name := range axes {
		t.Columns = append(t.Columns, number(name, "m"))
	}
	for _, name := range axes {
		t.Columns = append(t.Columns, number("difference in "+name, "m"))
	}
	t.Columns = append(t.Columns, number("distance", "m"), report.Column{Name: "finding"})
	add := func(all []Position, role string) {
		for _, p := range all {
			row := []string{p.Mark, role}
			none := "not in the datum, for " + x.without()
			for _, v := range p.At {
				row = append(row, millimetres(v))
			}
			for c := range axes {
				switch {
				case p.DistanceM == nil:
					row = append(row, report.Missing(none))
				case math.IsNaN(float64(p.Off[c])):
					row = append(row, report.Missing("not surveyed"))
				default:
					row = append(row, millimetres(float64(p.Off[c])))
				}
			}
			if p.DistanceM == nil {
				row = append(row, report.Missing(none))
			} else {
				row = append(row, millimetres(*p.DistanceM))
			}
			finding := ""
			if p.Agrees != nil {
				finding = map[bool]string{true: "agrees", false: "contradicts the others"}[*p.Agrees]
			}
			t.Rows = append(t.Rows, append(row, finding))
		}
	}
	add(x.Control, survey.ControlPoint.String())
	add(x.Check, survey.CheckPoint.String())
	return t
}

// millimetres writes metres to the millimetre, nothing as 0.000.
func millimetres(m float64) string {
	if s := fmt.Sprintf("%.3f", m); s != "-0.000" {
		return s
	}
	return "0.000"
}
