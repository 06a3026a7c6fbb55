package scenarios

import (
	"bytes"
	"context"
	"encoding/json"
	"encoding/xml"
	"errors"
	"fmt"
	"html"
	"io"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strconv"
	"strings"
	"testing"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/survey"

	"github.com/google/go-cmp/cmp"
)

func write(t *testing.T, r *Run, s *Score, dir string) {
	t.Helper()
	if err := r.Write(dir, s, "seed 4, virtual time", "selvage test"); err != nil {
		t.Fatal(err)
	}
}

// What is written is the survey that went in, and the same scenario and seed give the same bytes from end to end.
func TestWrite(t *testing.T) {
	parent := t.TempDir()
	a, b := filepath.Join(parent, "a"), filepath.Join(parent, "b")
	r := shortRun(t, nil)
	s := score(t, r)
	write(t, r, s, a)
	again := shortRun(t, nil)
	write(t, again, score(t, again), b)
	if diff := cmp.Diff(files(t, a), files(t, b)); diff != "" {
		t.Errorf("the same seed gives other bytes: %s", diff)
	}
	if entries, _ := os.ReadDir(parent); len(entries) != 2 {
		t.Errorf("left behind: %v", entries)
	}

	back, err := survey.Read(a)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(r.Outing.Survey.Ties, back.Ties); diff != "" {
		t.Errorf("ties: %s", diff)
	}
	if len(back.Truth) != len(r.Outing.Survey.Truth) || len(back.Warnings) > 0 {
		t.Errorf("%d true poses of %d, warnings %v", len(back.Truth), len(r.Outing.Survey.Truth), back.Warnings)
	}

	var summary Score
	data := files(t, a)
	if err := json.Unmarshal(data[summaryName], &summary); err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(&summary, s) {
		t.Errorf("summary.json reads back as %+v, expected %+v", summary, s)
	}
	page := xml.NewDecoder(bytes.NewReader(data["results/report.html"]))
	page.Entity = map[string]string{}
	for {
		if _, err := page.Token(); errors.Is(err, io.EOF) {
			break
		} else if err != nil {
			t.Fatalf("report.html: %v", err)
		}
	}
	for _, want := range []string{s.Finding(), "seed 4, virtual time", "Position error against truth", "Bytes sent by each robot", "summary.json", "Verdicts that changed", fmt.Sprintf("The verdict on %d ties changed", s.TiesChanged)} {
		if !strings.Contains(html.UnescapeString(string(data["results/report.html"])), want) {
			t.Errorf("report.html lacks %q", want)
		}
	}

	// Verdicts and poses are those of the run.
	verdicts, err := survey.ReadVerdicts(a, back)
	if err != nil {
		t.Fatal(err)
	}
	count := map[string]int{}
	for i := range verdicts {
		count[verdicts[i].Verdict]++
	}
	if count["held"] != s.Ties.All.Held || count["refused"] != s.Ties.All.Refused || len(verdicts) != len(back.Ties) {
		t.Errorf("verdicts.csv: %v of %d, score %+v", count, len(verdicts), s.Ties.All)
	}
	// Their history ends with them, and what was tested says against which bound.
	changes, err := survey.ReadHistory(a, back)
	if err != nil {
		t.Fatal(err)
	}
	last, turned, lost := map[string]survey.ResultChange{}, map[string]bool{}, 0
	once := map[string]bool{}
	for _, x := range changes {
		if x.Old != "" && x.Old != x.New {
			turned[x.Tie] = true
		}
		once[x.Tie] = once[x.Tie] || x.New == "held"
		last[x.Tie] = x
	}
	for _, v := range verdicts {
		if x, told := last[v.Tie]; told && (x.New != v.Verdict) || told != (v.Reason != unheard) {
			t.Errorf("tie %s: %+v, its history ends with %+v", v.Tie, v, x)
		}
		if once[v.Tie] && v.Verdict != "held" {
			lost++
		}
		if told := v.Reason != unheard; v.Verdict == "open" && told && !strings.Contains(v.Reason, " would settle ") && !strings.Contains(v.Reason, " is to bring") {
			t.Errorf("tie %s is open, and nothing says what would settle it: %s", v.Tie, v.Reason)
		}
		if math.IsNaN(v.ChiSquare) != math.IsNaN(v.Threshold) || v.Verdict == "refused" && !(v.ChiSquare >= v.Threshold) || v.Verdict == "held" && !(v.ChiSquare < v.Threshold) {
			t.Errorf("tie %s: %s, chi square %g, threshold %g", v.Tie, v.Verdict, v.ChiSquare, v.Threshold)
		}
	}
	if s.TiesChanged != len(turned) || s.TiesLost != lost || len(turned) == 0 || changes[len(changes)-1].StampNS > r.EndNS {
		t.Errorf("%d ties changed and %d lost, score %d and %d", len(turned), lost, s.TiesChanged, s.TiesLost)
	}
	places := r.places()
	rows := 0
	for i, line := range strings.Split(strings.TrimSpace(string(data["results/poses.csv"])), "\n")[2:] {
		f := strings.Split(line, ",")
		x, _ := strconv.ParseFloat(f[4], 64)
		k := i
		p := 0
		for k >= len(places[p].IDs) {
			k -= len(places[p].IDs)
			p++
		}
		if pose := places[p].at(k, 3); pose.T[0] != x {
			t.Fatalf("row %d: x %v, expected %v", i, x, pose.T[0])
		}
		rows++
	}
	if want := len(r.Outing.Survey.Truth); rows != want {
		t.Errorf("poses.csv has %d rows, expected %d", rows, want)
	}
}

// The covariances are those of all data and held ties: zero at the fixed keyframe, and the inverse of a dense information matrix
// elsewhere.
func TestResultCovariance(t *testing.T) {
	r := shortRun(t, func(sc *Scenario) { sc.Fleet.KeyframeSpacing = 5 })
	poses, err := r.resultPoses(r.places())
	if err != nil {
		t.Fatal(err)
	}
	if first := poses[0][0]; !first.HasCov || first.Cov != [21]float64{} {
		t.Errorf("covariance of the fixed keyframe: %v", first.Cov)
	}
	s := r.Outing.Survey
	verdict := r.verdicts()
	p, err := adjust.New(s, func(k int) bool { return verdict[s.Ties[k].ID].Verdict.String() == "held" })
	if err != nil {
		t.Fatal(err)
	}
	for i := range poses {
		for k := range poses[i] {
			x := &poses[i][k]
			p.Graph.Values.Poses[p.Var[adjust.Key{Robot: x.Robot, Session: x.Session, ID: x.ID}]] = adjust.Pose(x.Pose)
		}
	}
	// The information matrix by central differences of the residuals, all poses but the first.
	n := len(p.Keys) - 1
	info := make([][]float64, 6*n)
	for i := range info {
		info[i] = make([]float64, 6*n)
	}
	for f := range p.Factors.I {
		ends := [2]int32{p.Factors.I[f], p.Factors.J[f]}
		var jac [12][6]float64
		for e, v := range ends {
			for c := range 6 {
				var r [2]lie.Tangent
				for side, h := range []float64{1e-5, -1e-5} {
					keep := p.Graph.Values.Poses[v]
					var xi lie.Tangent
					xi[c] = h
					p.Graph.Values.Poses[v] = keep.Mul(lie.Exp(xi))
					r[side] = p.Factors.Residual(f, &p.Graph.Values)
					p.Graph.Values.Poses[v] = keep
				}
				for k := range 6 {
					jac[6*e+c][k] = (r[0][k] - r[1][k]) / 2e-5
				}
			}
		}
		omega := p.Factors.Info(f)
		for a := range 12 {
			for b := range 12 {
				va, vb := int(ends[a/6])-1, int(ends[b/6])-1
				if va < 0 || vb < 0 {
					continue
				}
				sum := 0.0
				for k := range 6 {
					for l := range 6 {
						sum += jac[a][k] * omega[6*k+l] * jac[b][l]
					}
				}
				info[6*va+a%6][6*vb+b%6] += sum
			}
		}
	}
	last := &poses[len(poses)-1][len(poses[len(poses)-1])-1]
	v := int(p.Var[adjust.Key{Robot: last.Robot, Session: last.Session, ID: last.ID}]) - 1
	want := inverseColumns(info, 6*v, 6)
	for i := range 6 {
		for j := i; j < 6; j++ {
			got, w := last.Cov[i*(11-i)/2+j], want[j][6*v+i]
			scale := want[i][6*v+i] * want[j][6*v+j]
			if d := got - w; d*d > 1e-8*scale {
				t.Errorf("covariance %d %d: %g, dense %g", i, j, got, w)
			}
		}
	}
}

// inverseColumns solves for some columns of the inverse by Gauss-Jordan elimination without pivoting, which suits a positive
// definite matrix; a is overwritten.
func inverseColumns(a [][]float64, first, count int) [][]float64 {
	n := len(a)
	x := make([][]float64, count)
	for c := range x {
		x[c] = make([]float64, n)
		x[c][first+c] = 1
	}
	for k := range n {
		for i := k + 1; i < n; i++ {
			f := a[i][k] / a[k][k]
			if f == 0 {
				continue
			}
			for j := k; j < n; j++ {
				a[i][j] -= f * a[k][j]
			}
			for c := range x {
				x[c][i] -= f * x[c][k]
			}
		}
	}
	for k := n - 1; k >= 0; k-- {
		for c := range x {
			for j := k + 1; j < n; j++ {
				x[c][k] -= a[k][j] * x[c][j]
			}
			x[c][k] /= a[k][k]
		}
	}
	return x
}

// A rehearsal replaces its like and nothing else.
func TestCheckFolder(t *testing.T) {
	parent := t.TempDir()
	r := shortRun(t, nil)
	s := score(t, r)
	ours := filepath.Join(parent, "ours")
	write(t, r, s, ours)
	first := files(t, ours)
	write(t, r, s, ours)
	if diff := cmp.Diff(first, files(t, ours)); diff != "" {
		t.Errorf("written again: %s", diff)
	}

	foreign := filepath.Join(parent, "foreign")
	plain := filepath.Join(parent, "survey")
	file := filepath.Join(parent, "file")
	if err := survey.Write(plain, r.Outing.Survey); err != nil {
		t.Fatal(err)
	}
	if err := os.MkdirAll(foreign, 0o755); err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{filepath.Join(foreign, "letter.txt"), file, filepath.Join(ours, "rulings.csv")} {
		if err := os.WriteFile(name, []byte("mine\n"), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	for _, dir := range []string{foreign, plain, file, ours} {
		var before map[string][]byte
		if dir != file {
			before = files(t, dir)
		}
		if err := r.Write(dir, s, "now", "test"); !errors.Is(err, ErrOccupied) {
			t.Errorf("%s: %v, expected it to be refused", dir, err)
		}
		if dir != file {
			if diff := cmp.Diff(before, files(t, dir)); diff != "" {
				t.Errorf("%s changed although refused: %s", dir, diff)
			}
		}
	}
}

// A run that was stopped leaves a sound folder with what there was.
func TestWriteInterrupted(t *testing.T) {
	sc := Default()
	sc.Name, sc.Duration, sc.Fleet.Robots, sc.Fleet.StartSpread = "stopped", 400, 3, 20
	w, err := Simulate(sc, 2)
	if err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(context.Background())
	r, err := Virtual(ctx, w.Outing(sc, 2), Settings{Progress: func(p Progress) {
		if p.NowNS >= 180e9 {
			stop()
		}
	}})
	if err != nil {
		t.Fatal(err)
	}
	s := score(t, r)
	if !s.Interrupted || s.Accepted || s.GapRelative != nil || !strings.HasPrefix(s.Finding(), "Interrupted") {
		t.Errorf("score %+v; %s", s, s.Finding())
	}
	dir := filepath.Join(t.TempDir(), "out")
	write(t, r, s, dir)
	if _, err := survey.Read(dir); err != nil {
		t.Error(err)
	}
	page := string(files(t, dir)["results/report.html"])
	if !strings.Contains(page, "Stopped by hand after 0 h 03 min 00 s") && !strings.Contains(page, "Stopped by hand after 0 h 03 min 01 s") {
		t.Error("the report does not say that the run was stopped")
	}
}

// A recorded survey in the plane, without truth and without radio.
func TestWriteRecorded(t *testing.T) {
	r := shortRun(t, func(sc *Scenario) {
		sc.Site.Kind = "store"
		sc.Site.Store.Aisles, sc.Site.Store.Blocks = 6, 1
	})
	sv := *r.Outing.Survey
	sv.Truth = nil
	again, err := Virtual(context.Background(), Recorded(&sv), Settings{})
	if err != nil {
		t.Fatal(err)
	}
	s := score(t, again)
	for _, c := range s.Acceptance {
		if c.Name != "settled" && c.Name != "gap" {
			t.Errorf("a recorded survey is held to %s", c.Name)
		}
	}
	dir := filepath.Join(t.TempDir(), "out")
	write(t, again, s, dir)
	poses, err := again.resultPoses(again.places())
	if err != nil {
		t.Fatal(err)
	}
	for _, list := range poses {
		for k := range list {
			if !list[k].Pose.Planar() || list[k].Cov[6+5] != 0 {
				t.Fatalf("pose %+v leaves the plane", list[k])
			}
		}
	}
	var b strings.Builder
	if err := s.Text(&b, 0); err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"no truth is known", "gap", "ties", "rounds"} {
		if !strings.Contains(b.String(), want) {
			t.Errorf("the table lacks %q:\n%s", want, b.String())
		}
	}
}
