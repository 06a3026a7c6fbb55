package audit

import (
	"bytes"
	"encoding/csv"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"selvage/internal/survey"
)

func markOf(t *testing.T, a *Audit, name string) *Mark {
	t.Helper()
	for k := range a.Marks {
		if a.Marks[k].Mark == name {
			return &a.Marks[k]
		}
	}
	t.Fatalf("the audit does not tell of %s", name)
	return nil
}

// A control point with coordinates of elsewhere is named with its distance, two that were exchanged with each other; the others pass, and
// the map stays where they have it.
func TestWrongControlPoints(t *testing.T) {
	for _, seed := range []uint64{0, 3} { // plane, space
		s, verdicts := sightedMarks(seed, 0.3, 11)
		s.Marks[2].T[1] += 2
		a := run(t, s, verdicts)
		c := markOf(t, a, "m2").Control
		if c == nil || c.Status != Contradicts || math.Abs(*c.ApartM-2) > 0.2 || c.LiesAt != "" {
			t.Errorf("seed %d: m2 moved by 2 m: %+v", seed, c)
		}
		if m := markOf(t, a, "m2"); m.Sightings < 10 || len(m.Sessions) != 3 {
			t.Errorf("seed %d: sightings of m2 are left out: %+v", seed, m)
		}
		for k := range a.Marks {
			if m := &a.Marks[k]; m.Mark != "m2" && m.Control != nil && m.Control.Status != Passed {
				t.Errorf("seed %d: %s %+v", seed, m.Mark, m.Control)
			}
		}
		if !strings.Contains(a.Finding(), "the coordinates of control point m2 disagree with what was seen") || a.Islands[0].Gauge != nil || len(a.Islands[0].Controls) != 9 {
			t.Errorf("seed %d: %s %+v", seed, a.Finding(), a.Islands)
		}

		s, verdicts = sightedMarks(seed, 0.3, 11)
		s.Marks[4].T, s.Marks[5].T = s.Marks[5].T, s.Marks[4].T
		a = run(t, s, verdicts)
		for name, other := range map[string]string{"m4": "m5", "m5": "m4"} {
			c := markOf(t, a, name).Control
			if c == nil || c.Status != Contradicts || c.LiesAt != other || *c.LiesAtM > 0.2 {
				t.Errorf("seed %d: %s exchanged with %s: %+v", seed, name, other, c)
			}
		}
		if lines := strings.Join(a.attention(), "\n"); !strings.Contains(lines, "may be exchanged") {
			t.Errorf("seed %d: it says\n%s", seed, lines)
		}
	}
	// A small error passes the robust fit and is found by the test of the coordinates.
	s, verdicts := sightedMarks(0, 0.1, 11)
	for k := range 10 {
		s.Marks[k].Sigma = [3]float64{0.01, 0.01, math.Inf(1)}
		s.Marks[k].T = [3]float64{}
	}
	exact, _ := sightedMarks(0, 0, 11)
	for k := range 10 {
		s.Marks[k].T = exact.Marks[k].T
	}
	s.Marks[6].T[0] += 0.15
	a := run(t, s, verdicts)
	if c := markOf(t, a, "m6").Control; c.Status != Failed || math.Abs(*c.ApartM-0.15) > 0.05 || !slices.Equal(a.Controls, []string{"m6"}) {
		t.Errorf("m6 moved by 15 cm: %+v, to be removed %v", c, a.Controls)
	}
}

// Landmarks 11 and 17 of run 1 of a recording have each other's coordinates in its list of landmarks (Leung, Halpern, Barfoot, Liu, 'The
// UTIAS multi-robot cooperative localization and mapping dataset', International Journal of Robotics Research 30, 2011): as control
// points they are named, and what they are taken for; nothing else is off by more than decimetres.
func TestRecordedLandmarks(t *testing.T) {
	dir := os.Getenv("SELVAGE_SHARED")
	if dir == "" {
		dir = filepath.Join("..", "..", "..", "shared")
	}
	dir = filepath.Join(dir, "datasets", "mrclam", "run1")
	if _, err := os.Stat(dir); err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatalf("test data: %v", err)
		}
		t.Skipf("test data: %v", err)
	}
	l, err := survey.ReadSightingLog(dir)
	if err != nil {
		t.Fatal(err)
	}
	o := survey.DefaultSightingLogOptions()
	o.FromS, o.ToS, o.ThinS, o.Role = 100, 300, 1, survey.ControlPoint
	s, _, err := l.Survey(o)
	if err != nil {
		t.Fatal(err)
	}
	a := run(t, s, nil)
	for k := range a.Marks {
		m := &a.Marks[k]
		other := map[string]string{"m11": "m17", "m17": "m11"}[m.Mark]
		switch c := m.Control; {
		case c == nil:
			t.Errorf("%s is not tested", m.Mark)
		case other == "" && (c.Status == Contradicts || c.ApartM != nil && *c.ApartM > 0.5):
			t.Errorf("%s %+v", m.Mark, c)
		case other != "" && (c.Status != Contradicts || math.Abs(*c.ApartM-6) > 0.3 || c.LiesAt != other):
			t.Errorf("%s %+v, want 6 m off, where %s should be", m.Mark, c, other)
		}
	}
	if want := "the coordinates of control points m1"; !strings.Contains(a.Finding(), want) || len(a.wrong()) != 2 {
		t.Errorf("it finds: %s", a.Finding())
	}
}

// A mark that one robot takes for another: a little way off all its sightings stand, and together they show; far off they are left out,
// and counted.
func TestMarkSeenElsewhere(t *testing.T) {
	for _, c := range []struct {
		off  float64
		left bool
	}{{0.2, false}, {3, true}} {
		s, verdicts := sightedMarks(1, 0.3, 9)
		r := &s.Robots[1]
		n := 0
		for k := range r.Sightings {
			e := &r.Sightings[k]
			if e.Mark != "m3" {
				continue
			}
			n++
			// What a robot sees c.off farther away, by any sense but bearings.
			switch e.Kind {
			case survey.Position:
				far := math.Sqrt(e.Sight.Value[0]*e.Sight.Value[0] + e.Sight.Value[1]*e.Sight.Value[1] + e.Sight.Value[2]*e.Sight.Value[2])
				for i := range 3 {
					e.Sight.Value[i] *= 1 + c.off/far
				}
			case survey.Range, survey.RangeBearing:
				e.Sight.Value[0] += c.off
			}
		}
		a := run(t, s, verdicts)
		m := markOf(t, a, "m3")
		left := slices.IndexFunc(a.LeftOut, func(l LeftOut) bool { return l.Robot == "r1" && l.Mark == "m3" })
		if c.left {
			if left < 0 || a.LeftOut[left].LeftOut < n/2 || a.LeftOut[left].Of != n {
				t.Errorf("%g m off: left out %+v, want most of %d", c.off, a.LeftOut, n)
			}
			continue
		}
		if m.Split == nil || m.Split.Session != "r1" || !m.Split.Failed || left >= 0 {
			t.Errorf("%g m off: %+v, left out %+v", c.off, m.Split, a.LeftOut)
		}
		for k := range a.Marks {
			if x := &a.Marks[k]; x.Mark != "m3" && x.Split != nil && x.Split.Failed && x.Split.T > m.Split.T {
				t.Errorf("%s is seen elsewhere by %+v", x.Mark, x.Split)
			}
		}
	}
}

// Whole poses are bridges by the graph alone, but not where marks hold the two sides to each other. Of five ranges with bearings, four of
// which see one spot from one place, the fifth is a bridge, and yet checked in one direction.
func TestBridgesAmongSights(t *testing.T) {
	s, verdicts := sightedMarks(1, 0.3, 5)
	s.Ties, verdicts = s.Ties[:1], verdicts[:1]
	if s.Ties[0].Kind != survey.WholePose {
		t.Fatal("the first tie is no whole pose")
	}
	a := run(t, s, verdicts)
	if len(a.Bridges) > 0 || a.Ties[0].Status != Passed || len(a.Places) > 0 {
		t.Errorf("with marks: bridges %v, places %+v, %s", a.Bridges, a.Places, a.Ties[0].Status)
	}
	for i := range s.Robots {
		s.Robots[i].Sightings = nil
	}
	a = run(t, s, verdicts)
	if !slices.Equal(a.Bridges, []string{s.Ties[0].ID}) || a.Ties[0].Status != Unchecked || *a.Ties[0].Redundancy != 0 {
		t.Errorf("without marks: bridges %v, %s", a.Bridges, a.Ties[0].Status)
	}

	s, verdicts = tracks(2, 20, 20, 20, 20, 180)
	for k := range s.Ties {
		s.Ties[k].Kind, s.Ties[k].FromKey = survey.RangeBearing, s.Ties[k].FromKey+4
		s.Ties[k].Sight = survey.Sight{Value: [3]float64{2, math.Pi}, Sigma: [3]float64{0.05, 0.01, math.Inf(1)}}
	}
	a = run(t, s, verdicts)
	for k, dof := range []int{2, 2, 2, 2, 1} {
		if x := &a.Ties[k]; x.Bridge != (dof == 1) || x.DoF != dof || x.Status != Passed {
			t.Errorf("ranges with bearings: %+v", x)
		}
	}
	if len(a.Islands) != 1 || len(a.Places) != 2 || !slices.Equal(a.Places[1].Ties, []string{"t4"}) || len(a.Places[0].Ties) != 4 {
		t.Errorf("%d islands, places %+v", len(a.Islands), a.Places)
	}
	s.Ties, verdicts = s.Ties[:1], verdicts[:1]
	a = run(t, s, verdicts)
	if x := &a.Ties[0]; x.Status != Untested || len(a.Islands) != 2 || !strings.Contains(x.Reason, joinsNot) {
		t.Errorf("one alone joins nothing: %+v, %d islands", x, len(a.Islands))
	}
}

// Ties that end at a moment between two keyframes are audited where they are held, and tested against the map where they are not.
func TestTiesAtMoments(t *testing.T) {
	s, verdicts := tracks(2, 0, 60, 120, 180)
	for i := range s.Robots {
		for k := range s.Robots[i].Keyframes {
			x := &s.Robots[i].Keyframes[k]
			x.StampNS, x.HasStamp = int64(k)*1000, true
		}
	}
	verdicts[1].Verdict, verdicts[2].Verdict = "refused", "refused"
	for k := range s.Ties {
		x := &s.Ties[k]
		x.ToByStamp, x.ToStampNS, x.ToKey = true, x.ToKey*1000+400, 0
		x.Pose.T[0] = 0.2
	}
	s.Ties[2].Pose.T[1] = 4
	a := run(t, s, verdicts)
	for k, want := range []Status{Passed, Fits, Contradicts, Passed} {
		x := &a.Ties[k]
		if x.Status != want || x.T == nil || x.To.Key != -s.Ties[k].ToStampNS || x.AtLeast {
			t.Errorf("%+v, want %s", x, want)
		}
	}
	near(t, "leave-one-out", *a.Ties[2].ApartM, 4, 1e-3)
}

// The files tell of ties of every kind by the components that these have, and of marks.
func TestFilesOfSights(t *testing.T) {
	s, verdicts := sighted(0, 0.3)
	a := run(t, s, verdicts)
	dir := t.TempDir()
	if err := a.Write(dir, "today", "test"); err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile(filepath.Join(dir, "ties.csv"))
	if err != nil {
		t.Fatal(err)
	}
	r := csv.NewReader(bytes.NewReader(text))
	r.Comment = '#'
	rows, err := r.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	has := map[string]string{"pose": "x y rz", "position": "x y", "range_bearing": "range bearing", "range": "range", "bearing": "bearing"}
	unit := map[string]string{"x": "_m", "y": "_m", "range": "_m", "rz": "_rad", "bearing": "_rad"}
	kinds := map[string]bool{}
	for _, row := range rows[1:] {
		cell := func(name string) string { return row[slices.Index(rows[0], name)] }
		kinds[cell("kind")] = true
		for c, u := range unit {
			want := slices.Contains(strings.Fields(has[cell("kind")]), c)
			for _, name := range []string{"r_" + c + u, "w_" + c, "detectable_" + c + u} {
				if (cell(name) != "") != want {
					t.Errorf("%s, %s: %q", cell("kind"), name, cell(name))
				}
			}
		}
		if cell("gauge_robot") != "" || cell("shift_m") == "" {
			t.Errorf("%s: gauge %q, shift %q", cell("tie"), cell("gauge_robot"), cell("shift_m"))
		}
	}
	if len(kinds) != 5 {
		t.Errorf("kinds %v", kinds)
	}
	page, err := os.ReadFile(filepath.Join(dir, "audit.html"))
	if err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"Control points against what was seen of them", "Marks that several have seen", "range and bearing, passed", "the datum, which control points hold", "shared marks hold the map together"} {
		if !bytes.Contains(page, []byte(want)) {
			t.Errorf("the page lacks %q", want)
		}
	}
	var out bytes.Buffer
	if err := a.Text(&out); err != nil || !strings.Contains(out.String(), "bearing, passed") {
		t.Errorf("%v: on the terminal\n%s", err, out.String())
	}
}
