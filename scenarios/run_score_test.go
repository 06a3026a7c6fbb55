package scenarios

import (
	"context"
	"encoding/csv"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strconv"
	"strings"
	"testing"

	"selvage/agent"
	"selvage/internal/adjust"
	"selvage/internal/lie"
)

// shortRun is a rehearsal of a few minutes.
func shortRun(t *testing.T, change func(sc *Scenario)) *Run {
	t.Helper()
	sc := Default()
	sc.Name, sc.Duration, sc.Fleet.StartSpread = "short", 500, 20
	sc.Fleet.Robots, sc.Site.Mine.Drifts, sc.Site.Mine.CrossCuts, sc.Site.Mine.Levels = 3, 2, 3, 1
	sc.FalseTies.Independent, sc.FalseTies.Clustered = 0.1, 0
	if change != nil {
		change(sc)
	}
	w, err := Simulate(sc, 4)
	if err != nil {
		t.Fatal(err)
	}
	r, err := Virtual(context.Background(), w.Outing(sc, 4), Settings{})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

func score(t *testing.T, r *Run) *Score {
	t.Helper()
	s, err := r.Score()
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// The score counts what the run holds.
func TestScoreCounts(t *testing.T) {
	r := shortRun(t, nil)
	s := score(t, r)
	if !s.Settled || s.Interrupted || s.GapRelative == nil || *s.GapRelative > gapLimit || len(s.Islands) != 1 {
		t.Fatalf("settled %v, interrupted %v, gap %v, islands %+v", s.Settled, s.Interrupted, s.GapRelative, s.Islands)
	}
	sv := r.Outing.Survey
	measured := make([]int, len(sv.Robots))
	for i := range sv.Robots {
		measured[i] = agent.RawPoseBytes*len(sv.Robots[i].Keyframes) + agent.RawMeasurementBytes*len(sv.Robots[i].Relatives)
	}
	for i := range sv.Ties {
		for k := range sv.Robots {
			if sv.Robots[k].ID == sv.Ties[i].FromRobot {
				measured[k] += agent.RawMeasurementBytes
			}
		}
	}
	for i := range s.Robots {
		x := &s.Robots[i]
		if x.BytesRaw != measured[i] || x.Keyframes != len(sv.Robots[i].Keyframes) || x.BytesUp != r.Traffic[i].Up || !x.Joined {
			t.Errorf("robot %+v: raw graph of %d bytes, %d keyframes, %d bytes sent", x, measured[i], len(sv.Robots[i].Keyframes), r.Traffic[i].Up)
		}
	}
	sum := func(v Verdicts) int { return v.Held + v.Refused + v.Open + v.Unheard }
	yes := 0
	for _, is := range r.Outing.TieTrue {
		if is {
			yes++
		}
	}
	if sum(s.Ties.All) != len(sv.Ties) || sum(*s.Ties.True) != yes || sum(*s.Ties.False) != len(sv.Ties)-yes || yes == len(sv.Ties) || s.Ties.All.Held == 0 {
		t.Errorf("ties %+v of %d, %d true", s.Ties, len(sv.Ties), yes)
	}
	if s.Ties.True.Held+s.Ties.False.Held != s.Ties.All.Held {
		t.Errorf("held: true %d, false %d, all %d", s.Ties.True.Held, s.Ties.False.Held, s.Ties.All.Held)
	}
}

// Errors do not depend on where the truth has its origin; alone they do not depend on ties; in the team they are at least what an
// alignment of each robot by itself leaves.
func TestScoreErrors(t *testing.T) {
	r := shortRun(t, nil)
	s := score(t, r)
	places := r.places()
	truth := newTruthIndex(r.Outing.Survey)
	for i := range s.Robots {
		x := &s.Robots[i]
		if x.AteAlone == nil || x.AteTeam == nil || !(*x.AteAlone > 1e-4) || *x.AteTeam > 1 {
			t.Fatalf("robot %s: alone %v, in the team %v", x.ID, x.AteAlone, x.AteTeam)
		}
		if own := rmse(truth.pairsOf(&places[i], x.ID)); own > *x.AteTeam*(1+1e-9) {
			t.Errorf("robot %s: aligned by itself %g, with the team %g: expected no more", x.ID, own, *x.AteTeam)
		}
	}

	move := lie.Exp(lie.Tangent{300, -40, 7, 0.3, -0.2, 2})
	for i := range r.Outing.Survey.Truth {
		p := &r.Outing.Survey.Truth[i]
		x := adjust.Pose(p.Pose)
		x = move.Mul(x)
		p.Pose = adjust.Folder(&x)
	}
	moved := score(t, r)
	for i := range s.Robots {
		for _, e := range [][2]*float64{{s.Robots[i].AteAlone, moved.Robots[i].AteAlone}, {s.Robots[i].AteTeam, moved.Robots[i].AteTeam}} {
			if math.Abs(*e[0]-*e[1]) > 1e-9 {
				t.Errorf("robot %s: %.12g, %.12g after the truth has moved", s.Robots[i].ID, *e[0], *e[1])
			}
		}
	}

	r.Outing.Survey.Truth, r.Outing.TieTrue = nil, nil
	blind := score(t, r)
	if blind.Truth || blind.Ties.False != nil || blind.Robots[0].AteAlone != nil || blind.Robots[0].AteTeam != nil {
		t.Errorf("without truth: %+v", blind)
	}
	for _, c := range blind.Acceptance {
		if c.Name == "false_ties_held" {
			t.Error("without truth false ties are counted")
		}
	}
}

// A robot that has seen control points is held by them alone, without an anchor; its error alone is found like every other.
func TestScoreErrorsOnControl(t *testing.T) {
	s := score(t, shortRun(t, func(sc *Scenario) { sc.Marks.Count, sc.Marks.Control, sc.FalseTies.Independent = 30, 20, 0 }))
	for _, x := range s.Robots {
		if x.AteAlone == nil || !(*x.AteAlone > 1e-4 && *x.AteAlone < 1) {
			t.Errorf("robot %s: alone %v", x.ID, x.AteAlone)
		}
	}
}

// A false tie that is held, or one robot that hears nothing, is not accepted quietly.
func TestScoreRefuses(t *testing.T) {
	r := shortRun(t, nil)
	held := -1
	verdict := r.verdicts()
	for i := range r.Outing.Survey.Ties {
		if verdict[r.Outing.Survey.Ties[i].ID].Verdict.String() == "held" {
			held = i
		}
	}
	r.Outing.TieTrue[held] = false
	s := score(t, r)
	found := false
	for _, c := range s.Acceptance {
		found = found || c.Name == "false_ties_held" && !c.OK && *c.Value == 1
	}
	if !found || s.Accepted || !strings.Contains(s.Finding(), "1 false tie is held") {
		t.Errorf("accepted %v with a false tie held: %+v; %s", s.Accepted, s.Acceptance, s.Finding())
	}

	silent := shortRun(t, func(sc *Scenario) {
		sc.Radio.Outages = []OutageSpec{{Robot: "r02", From: 0, To: 86400}}
	})
	s = score(t, silent)
	if x := s.Robots[1]; x.Joined || x.AteTeam != nil || x.AteAlone == nil || x.BytesUp != 0 {
		t.Errorf("a robot without radio: %+v", x)
	}
	if s.Ties.All.Unheard == 0 {
		t.Error("ties of a robot without radio were heard")
	}
	if s.Settled || s.Accepted {
		t.Errorf("settled %v and accepted %v although r02 never was heard", s.Settled, s.Accepted)
	}
}

// The island with the most robots is the datum, whatever the order; sessions that share nothing are numbered one by one.
func TestPlaces(t *testing.T) {
	r := shortRun(t, nil)
	for _, p := range r.places() {
		if p.number != 0 {
			t.Errorf("robot %d has island %d, expected the datum", p.robot, p.number)
		}
	}
	s := *r
	s.Agents = append([]*agent.Agent{agent.New(agent.DefaultConfig(fleetName, "alone", 3))}, r.Agents...)
	for _, id := range []int64{1, 2} {
		if _, err := s.Agents[0].Handle(0, agent.Keyframe{Session: uint32(id), ID: 7, Pose: lie.Identity()}); err != nil {
			t.Fatal(err)
		}
	}
	var got []int
	for _, p := range s.places() {
		got = append(got, p.number)
	}
	if want := []int{1, 2, 0, 0, 0}; !reflect.DeepEqual(got, want) {
		t.Errorf("islands %v, expected %v", got, want)
	}
}

// The alignment and its error against figures computed with another program (scipy align_vectors, checked by direct minimisation).
func TestErrorPublished(t *testing.T) {
	f, err := os.Open(filepath.Join(shared(t), "checks", "trajectory_poses.csv"))
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var pairs []pair
	for _, row := range rows[1:] {
		var x [11]float64 // the columns up to the estimated position
		for k := range x {
			if x[k], err = strconv.ParseFloat(row[k], 64); err != nil {
				t.Fatal(err)
			}
		}
		pairs = append(pairs, pair{estimate: [3]float64(x[8:11]), truth: [3]float64(x[1:4])})
	}
	if e := rmse(pairs); math.Abs(e-0.0514385391) > 1e-9 {
		t.Errorf("error %.10f m, expected 0.0514385391", e)
	}
}

// SUMMARY.md is made from the comments and tags of run_score.go.
func TestSummaryPage(t *testing.T) {
	page := summaryPage(t)
	if *update {
		if err := os.WriteFile("SUMMARY.md", []byte(page), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	have, err := os.ReadFile("SUMMARY.md")
	if err != nil {
		t.Fatal(err)
	}
	if string(have) != page {
		t.Error("SUMMARY.md no longer matches run_score.go; run go test ./scenarios -run SummaryPage -update")
	}
}

func summaryPage(t *testing.T) string {
	docs := commentsOf(t, "run_score.go")
	var b strings.Builder
	b.WriteString("# results/summary.json of a rehearsal\n\n" +
		"One JSON object. Lengths are metres, times seconds; a figure that could not be computed is null. New fields may be added; those\n" +
		"listed here keep their meaning as long as `format` stays the same.\n\n" +
		"This page is made from the program: `go test ./scenarios -run SummaryPage -update`.\n")
	var section func(typ reflect.Type, path string)
	section = func(typ reflect.Type, path string) {
		heading := path
		if path == "" {
			heading = "top level"
		}
		fmt.Fprintf(&b, "\n## %s\n\n| field | type | meaning |\n|---|---|---|\n", heading)
		var later []func()
		for f := range fields(typ) {
			name, doc := f.Tag.Get("json"), docs[typ.Name()+"."+f.Name]
			if name == "" || doc == "" {
				t.Errorf("field %s.%s lacks a name or a comment", typ.Name(), f.Name)
			}
			kind, below, word := f.Type, join(path, name), ""
			if kind.Kind() == reflect.Pointer {
				kind, word = kind.Elem(), " or null"
			}
			list := kind.Kind() == reflect.Slice
			if list {
				kind, below = kind.Elem(), below+"[]"
			}
			switch kind.Kind() {
			case reflect.Struct:
				word = "object" + word
				later = append(later, func() { section(kind, below) })
			case reflect.String:
				word = "text" + word
			case reflect.Bool:
				word = "true or false" + word
			case reflect.Float64:
				word = "number" + word
			default:
				word = "whole number" + word
			}
			if list {
				word = "list, " + word
			}
			fmt.Fprintf(&b, "| %s | %s | %s |\n", name, word, doc)
		}
		for _, f := range later {
			f()
		}
	}
	section(reflect.TypeFor[Score](), "")
	return b.String()
}

// commentsOf returns the comments of the fields of a file by Type.Field, each on one line.
func commentsOf(t *testing.T, name string) map[string]string {
	file, err := parser.ParseFile(token.NewFileSet(), name, nil, parser.ParseComments)
	if err != nil {
		t.Fatal(err)
	}
	docs := map[string]string{}
	ast.Inspect(file, func(n ast.Node) bool {
		spec, ok := n.(*ast.TypeSpec)
		if !ok {
			return true
		}
		if s, ok := spec.Type.(*ast.StructType); ok {
			for _, f := range s.Fields.List {
				docs[spec.Name.Name+"."+f.Names[0].Name] = strings.Join(strings.Fields(f.Doc.Text()), " ")
			}
		}
		return false
	})
	return docs
}

// One robot has nothing to be joined with: that is no failure. A fleet without a common map is one.
func TestScoreWithoutMap(t *testing.T) {
	one := score(t, shortRun(t, func(sc *Scenario) { sc.Fleet.Robots, sc.FalseTies.Independent = 1, 0 }))
	if !one.Accepted || one.GapRelative != nil || !strings.Contains(one.Finding(), "one robot, and nothing to join it with") {
		t.Errorf("one robot: accepted %v, %s", one.Accepted, one.Finding())
	}
	apart := score(t, shortRun(t, func(sc *Scenario) { sc.Ties.Recall, sc.FalseTies.Independent = 0, 0 }))
	if apart.Accepted || apart.GapRelative != nil || !strings.Contains(apart.Finding(), "none of 3 robots shares a datum") {
		t.Errorf("robots that never met: accepted %v, %s", apart.Accepted, apart.Finding())
	}
}
