package audit

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"

	"selvage/internal/reliability"
	"selvage/internal/report"
)

// MarshalJSON writes a missing figure as null.
func (f Figure) MarshalJSON() ([]byte, error) {
	if x := float64(f); math.IsNaN(x) || math.IsInf(x, 0) {
		return []byte("null"), nil
	}
	return json.Marshal(float64(f))
}

// UnmarshalJSON reads what MarshalJSON wrote.
func (f *Figure) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*f = Figure(math.NaN())
		return nil
	}
	return json.Unmarshal(b, (*float64)(f))
}

// Write writes ties.csv, audit.json and audit.html to the folder dir, which is made. All three are complete before the first is put in
// place. Made is the date and time with zone as the page prints it, version the program's.
func (a *Audit) Write(dir, made, version string) error {
	var page bytes.Buffer
	if err := report.Write(&page, a.Page(made, version)); err != nil {
		return err
	}
	object, err := json.MarshalIndent(a, "", "  ")
	if err != nil {
		return err
	}
	ties, err := a.csv()
	if err != nil {
		return err
	}
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return err
	}
	tmp, err := os.MkdirTemp(dir, ".new-")
	if err != nil {
		return err
	}
	defer os.RemoveAll(tmp)
	files := []struct {
		name string
		text []byte
	}{{"ties.csv", ties}, {"audit.json", append(object, '\n')}, {"audit.html", page.Bytes()}}
	for _, f := range files {
		if err := os.WriteFile(filepath.Join(tmp, f.name), f.text, 0o644); err != nil {
			return err
		}
	}
	for _, f := range files {
		err = errors.Join(err, os.Rename(filepath.Join(tmp, f.name), filepath.Join(dir, f.name)))
	}
	return err
}

// csv writes the ties as a table, one row each in the order of the survey. Empty cells are figures that do not exist.
func (a *Audit) csv() ([]byte, error) {
	var b bytes.Buffer
	fmt.Fprintf(&b, "# audit of %s, datum %s; residuals and detectable errors along the axes of the far end, of a position along those of the sensor; detectable: alpha %g, power %g; shift relative to the gauge keyframe, or to control points where there is none\n",
		a.Survey, a.Datum, reliability.Alpha, reliability.Power)
	names := []string{"x", "y", "z", "rx", "ry", "rz", "range", "bearing", "elevation"}
	if a.Dimension == 2 {
		names = []string{"x", "y", "rz", "range", "bearing"}
	}
	unit := func(c int) string {
		switch names[c] {
		case "x", "y", "z", "range":
			return "_m"
		}
		return "_rad"
	}
	head := []string{"tie", "kind", "from_robot", "from_session", "from_key", "to_robot", "to_session", "to_key", "verdict", "reason", "status", "bridge", "single_place", "set"}
	for c, n := range names {
		head = append(head, "r_"+n+unit(c))
	}
	head = append(head, "residual_m", "residual_rad")
	for _, n := range names {
		head = append(head, "w_"+n)
	}
	head = append(head, "statistic", "statistic_is", "dof", "p", "bound", "redundancy", "redundancy_translation", "redundancy_rotation")
	for c, n := range names {
		head = append(head, "detectable_"+n+unit(c))
	}
	head = append(head, "shift_m", "shift_is", "shift_component", "shift_robot", "shift_session", "shift_key", "gauge_robot", "gauge_session", "gauge_key", "leave_one_out_m", "leave_one_out_rad")
	w := csv.NewWriter(&b)
	if err := w.Write(head); err != nil {
		return nil, err
	}
	number := func(x *float64) string {
		if x == nil || math.IsNaN(*x) || math.IsInf(*x, 0) {
			return ""
		}
		return strconv.FormatFloat(*x, 'g', -1, 64)
	}
	for k := range a.Ties {
		t := &a.Ties[k]
		set := ""
		if t.Set > 0 {
			set = strconv.Itoa(t.Set)
		}
		row := []string{t.ID, t.Kind, t.From.Robot, fmt.Sprint(t.From.Session), fmt.Sprint(t.From.Key), t.To.Robot, fmt.Sprint(t.To.Session), fmt.Sprint(t.To.Key),
			t.Verdict, t.Reason, string(t.Status), strconv.FormatBool(t.Bridge), strconv.FormatBool(t.Place), set}
		for c := range names {
			row = append(row, number(at(t, t.Residual, names[c])))
		}
		row = append(row, number(t.ResidualM), number(t.ResidualRad))
		for c := range names {
			row = append(row, number(at(t, t.W, names[c])))
		}
		is := ""
		switch {
		case t.T == nil:
		case t.AtLeast:
			is = "at_least"
		default:
			is = "exact"
		}
		row = append(row, number(t.T), is, strconv.Itoa(t.DoF), number(t.P), number(t.Bound), number(t.Redundancy), number(t.RedundancyTranslation), number(t.RedundancyRotation))
		for c := range names {
			row = append(row, number(at(t, t.Detectable, names[c])))
		}
		if s := t.Shift; s != nil {
			is := "bound"
			where, gauge := []string{"", "", ""}, []string{"", "", ""}
			if s.Exact {
				is = "exact"
			}
			if s.At != nil {
				where = []string{s.At.Robot, fmt.Sprint(s.At.Session), fmt.Sprint(s.At.Key)}
			}
			if g := s.Gauge; g != nil {
				gauge = []string{g.Robot, fmt.Sprint(g.Session), fmt.Sprint(g.Key)}
			}
			row = append(row, number(&s.M), is, s.Component)
			row = append(append(row, where...), gauge...)
		} else {
			row = append(row, make([]string, 9)...)
		}
		row = append(row, number(t.ApartM), number(t.ApartRad))
		if err := w.Write(row); err != nil {
			return nil, err
		}
	}
	w.Flush()
	return b.Bytes(), w.Error()
}

// at returns a component by name, nil where there is none.
func at[T ~float64](t *Tie, all []T, name string) *float64 {
	c := slices.Index(t.Parts, name)
	if c < 0 || c >= len(all) {
		return nil
	}
	x := float64(all[c])
	return &x
}
