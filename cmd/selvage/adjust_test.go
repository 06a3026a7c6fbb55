package main

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// The square of the examples: side lengths as measured, sigmas 1/20 m and 1/50 rad.
var square = struct {
	pairs  [4][2]int
	z      [4][3]float64 // x, y, angle of the second seen from the first
	weight [3]float64
}{
	[4][2]int{{0, 1}, {1, 2}, {2, 3}, {3, 0}},
	[4][3]float64{{2.01, 0, 0}, {0, 2.02, 0}, {-2.01, 0, 0}, {0, -1.99, 0}},
	[3]float64{400, 400, 2500},
}

// squareSurvey makes the square, cut in two, in dir.
func squareSurvey(t *testing.T, dir string) {
	t.Helper()
	var k, r strings.Builder
	k.WriteString("id,x,y,z,qx,qy,qz,qw\n0,0,0,0,0,0,0,1\n1,2,0,0,0,0,0,1\n2,2,2,0,0,0,0,1\n3,0,2,0,0,0,0,1\n")
	r.WriteString(tableHead)
	for i, p := range square.pairs {
		z, w := square.z[i], square.weight
		fmt.Fprintf(&r, "%d,%d,%g,%g,0,0,0,0,1,%g,0,0,0,0,0,%g,0,0,0,0,0,0,0,0,0,0,0,0,0,%g\n", p[0], p[1], z[0], z[1], w[0], w[1], w[2])
	}
	write(t, dir, "tables/keyframes.csv", k.String())
	write(t, dir, "tables/relative.csv", r.String())
	selvage(t, dir, "convert", "--from", "pose-tables", "tables", "-o", "whole").want(t, 0)
	selvage(t, dir, "split", "whole", "-n", "2", "-o", "square").want(t, 0)
}

// squareResiduals are the weighted residuals of the square, written from the definition: Log(Z^-1 X_i^-1 X_j) in the plane.
func squareResiduals(x [4][3]float64) []float64 {
	var all []float64
	for k, p := range square.pairs {
		a, b, z := x[p[0]], x[p[1]], square.z[k]
		rel := planarBetween(a, b)
		e := planarLog(planarBetween(z, rel))
		for c := range e {
			all = append(all, math.Sqrt(square.weight[c])*e[c])
		}
	}
	return all
}

// planarBetween is a^-1 b.
func planarBetween(a, b [3]float64) [3]float64 {
	s, c := math.Sincos(a[2])
	dx, dy := b[0]-a[0], b[1]-a[1]
	return [3]float64{c*dx + s*dy, -s*dx + c*dy, math.Remainder(b[2]-a[2], 2*math.Pi)}
}

// planarLog solves V(angle) rho = t, V = [sin, -(1-cos); 1-cos, sin] / angle.
func planarLog(x [3]float64) [3]float64 {
	th := x[2]
	if math.Abs(th) < 1e-12 {
		return x
	}
	s, c := math.Sin(th)/th, (1-math.Cos(th))/th
	d := s*s + c*c
	return [3]float64{(s*x[0] + c*x[1]) / d, (-c*x[0] + s*x[1]) / d, th}
}

// columns reads the table of results name: rows by column name.
func columns(t *testing.T, parts ...string) []map[string]string {
	t.Helper()
	text := read(t, parts...)
	note, rest, _ := strings.Cut(text, "\n")
	if !strings.HasPrefix(note, "# ") {
		t.Fatalf("no note in front: %q", note)
	}
	rows, err := csv.NewReader(strings.NewReader(rest)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var all []map[string]string
	for _, r := range rows[1:] {
		m := map[string]string{}
		for i, name := range rows[0] {
			m[name] = r[i]
		}
		all = append(all, m)
	}
	return all
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

func adjustJSON(t *testing.T, code int, dir string, args ...string) adjustReport {
	t.Helper()
	a := selvage(t, dir, append([]string{"adjust", "--json"}, args...)...)
	a.want(t, code)
	var r adjustReport
	d := json.NewDecoder(strings.NewReader(a.stdout))
	d.DisallowUnknownFields()
	if err := d.Decode(&r); err != nil {
		t.Fatalf("%v in %q", err, a.stdout)
	}
	if rest := a.stdout[d.InputOffset():]; rest != "\n" {
		t.Errorf("behind the object: %q", rest)
	}
	return r
}

// The written poses must be a stationary point of the cost, have the cost that was told, and the covariances be those of the
// normal equations, all three computed here from the definition by differences.
func TestAdjustSquare(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	r := adjustJSON(t, 0, dir, "square")
	if r.Stop != "converged" || r.Keyframes != 4 || r.Measurements+r.Ties != 4 || r.TiesHeld != r.Ties || r.Robots != 2 || r.Islands != 1 || r.Dimension != 2 || len(r.TiesLeftOut) != 0 {
		t.Errorf("report %+v", r)
	}
	rows := columns(t, dir, "square/results/poses.csv")
	var x [4][3]float64
	anchor := -1
	for i, row := range rows {
		id := int(number(t, row["id"]))
		x[id] = [3]float64{number(t, row["x_m"]), number(t, row["y_m"]), 2 * math.Atan2(number(t, row["qz"]), number(t, row["qw"]))}
		if i == 0 {
			anchor = id
		}
	}
	cost := 0.0
	for _, e := range squareResiduals(x) {
		cost += e * e / 2
	}
	if math.Abs(cost-r.Cost) > 1e-12 {
		t.Errorf("cost %.15g told, %.15g of the written poses", r.Cost, cost)
	}
	// Jacobian over the three free poses, right perturbations, by central differences with h = 1e-6: good to about 1e-9.
	const h = 1e-6
	j := mat.NewDense(12, 9, nil)
	column := 0
	at := map[int]int{}
	for v := range x {
		if v == anchor {
			continue
		}
		at[v] = column
		for c := range 3 {
			up, down := x, x
			up[v], down[v] = planarNudge(x[v], c, h), planarNudge(x[v], c, -h)
			a, b := squareResiduals(up), squareResiduals(down)
			for i := range a {
				j.Set(i, column+c, (a[i]-b[i])/(2*h))
			}
		}
		column += 3
	}
	gradient := mat.NewVecDense(9, nil)
	gradient.MulVec(j.T(), mat.NewVecDense(12, squareResiduals(x)))
	if g := mat.Norm(gradient, math.Inf(1)); g > 1e-5 {
		t.Errorf("gradient %g at the written poses", g)
	}
	var normal, cov mat.Dense
	normal.Mul(j.T(), j)
	if err := cov.Inverse(&normal); err != nil {
		t.Fatal(err)
	}
	index := map[string]int{"x": 0, "y": 1, "rz": 2}
	for _, row := range rows {
		v := int(number(t, row["id"]))
		for name, text := range row {
			pair := strings.Split(strings.TrimPrefix(name, "cov_"), "_")
			if !strings.HasPrefix(name, "cov_") {
				continue
			}
			a, aIn := index[pair[0]]
			b, bIn := index[pair[1]]
			want := 0.0
			if aIn && bIn && v != anchor {
				want = cov.At(at[v]+a, at[v]+b)
			}
			if got := number(t, text); math.Abs(got-want) > 1e-10 {
				t.Errorf("keyframe %d, %s: %.10g, want %.10g", v, name, got, want)
			}
		}
	}
	for _, d := range columns(t, dir, "square/results/datum_from_session.csv") {
		if d["joined"] != "true" || d["island"] != "0" {
			t.Errorf("session not joined: %v", d)
		}
	}
}

// planarNudge moves a pose along its own axis c.
func planarNudge(x [3]float64, c int, h float64) [3]float64 {
	s, k := math.Sincos(x[2])
	switch c {
	case 0:
		return [3]float64{x[0] + k*h, x[1] + s*h, x[2]}
	case 1:
		return [3]float64{x[0] - s*h, x[1] + k*h, x[2]}
	}
	return [3]float64{x[0], x[1], x[2] + h}
}

// Ties refused by verdict stay out, --all-ties takes them in, and their evidence outlives both.
func TestAdjustHeedsVerdicts(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	all := adjustJSON(t, 0, dir, "square")
	write(t, dir, "square/results/verdicts.csv", "# by hand\ntie,verdict,reason,chi_square,threshold,redundancy,detectable\ncut00002,refused,stands alone,99.5,16.27,,0.25\n")
	less := adjustJSON(t, 0, dir, "square")
	if !slices.Equal(less.TiesLeftOut, []string{"cut00002"}) || less.TiesHeld != 1 || !(less.Cost < 1e-20) {
		t.Errorf("one of the two ties of a ring refused: %+v", less)
	}
	rows := columns(t, dir, "square/results/verdicts.csv")
	if len(rows) != 2 || rows[0]["verdict"] != "held" || rows[1]["verdict"] != "refused" || rows[1]["reason"] != "stands alone" || rows[1]["chi_square"] != "99.5" || rows[1]["detectable"] != "0.25" || rows[1]["redundancy"] != "" {
		t.Errorf("verdicts written: %v", rows)
	}
	a := selvage(t, dir, "adjust", "square")
	a.want(t, 0)
	if want := "All 2 sessions share the datum; 1 tie holds it, 1 was left out by verdict (cut00002).\n"; !strings.HasPrefix(a.stdout, want) {
		t.Errorf("finding %q, want %q", strings.SplitN(a.stdout, "\n", 2)[0], want)
	}
	again := adjustJSON(t, 0, dir, "square", "--all-ties")
	if again.Cost != all.Cost || len(again.TiesLeftOut) != 0 {
		t.Errorf("--all-ties: cost %.17g, %.17g before any verdict", again.Cost, all.Cost)
	}
	write(t, dir, "square/results/verdicts.csv", "# by hand\ntie,verdict,reason,chi_square,threshold,redundancy,detectable\ncut00001,refused,,,,,\ncut00002,open,,,,,\n")
	parted := adjustJSON(t, 0, dir, "square")
	if parted.Islands != 2 || parted.TiesHeld != 0 {
		t.Errorf("without ties: %+v", parted)
	}
	a = selvage(t, dir, "adjust", "square")
	if want := "1 of 2 sessions lies in the datum, the others in 1 island of their own; no tie holds it, 2 were left out by verdict (cut00001, cut00002).\n"; !strings.HasPrefix(a.stdout, want) {
		t.Errorf("finding %q, want %q", strings.SplitN(a.stdout, "\n", 2)[0], want)
	}
	write(t, dir, "square/results/verdicts.csv", "tie,verdict,reason,chi_square,threshold,redundancy,detectable\ncut77777,refused,,,,,\ncut00001,perhaps,,,,,\n")
	selvage(t, dir, "adjust", "square").want(t, exitInput, `results/verdicts.csv:2: column tie: found "cut77777", expected the id of a tie`, `results/verdicts.csv:3: column verdict: found "perhaps"`)
}

// Columns and files that nobody knows are named, and change nothing.
func TestAdjustWarns(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	write(t, dir, "square/notes.txt", "rain\n")
	a := selvage(t, dir, "adjust", "square", "--json")
	a.want(t, 0, `"level":"warn"`, `"message":"notes.txt: not read by this version"`)
	if a = selvage(t, dir, "--log-level", "error", "adjust", "square", "--json"); strings.Contains(a.err, "notes.txt") {
		t.Errorf("a warning at level error: %s", a.err)
	}
}

func TestAdjustTellsWhatFailed(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	a := selvage(t, dir, "adjust", "square", "--json", "--max-iterations", "1")
	a.want(t, exitCheck, "did not converge (iteration_limit after 1 steps)")
	if !strings.Contains(a.stdout, `"stop": "iteration_limit"`) {
		t.Errorf("report %s", a.stdout)
	}
	surveyOf(t, dir, "line", 3, chain(3))
	relative := filepath.Join("line", "robots", "r1", "relative.csv")
	write(t, dir, relative, strings.ReplaceAll(read(t, dir, relative), "1,1,inf,inf,inf,1", "1,inf,inf,inf,inf,1"))
	selvage(t, dir, "adjust", "line").want(t, exitInput, "line: the measurements leave")
	if got := names(t, filepath.Join(dir, "line")); strings.Contains(got, "results") {
		t.Errorf("results of a survey that has none: %s", got)
	}
}

// Another start, another number of workers and another folder for the results change nothing that matters.
func TestAdjustOptions(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	best := adjustJSON(t, 0, dir, "square").Cost
	first := read(t, dir, "square/results/poses.csv")
	for _, start := range []string{"auto", "chordal", "tree", "given"} {
		if r := adjustJSON(t, 0, dir, "square", "--start", start, "-o", "at-"+start); math.Abs(r.Cost-best) > 1e-12 || r.Start != start {
			t.Errorf("start %s: cost %.15g, want %.15g", start, r.Cost, best)
		}
	}
	if r := adjustJSON(t, 0, dir, "square", "--workers", "2", "-o", "new/two"); r.Cost != best || read(t, dir, "new/two/results/poses.csv") != first {
		t.Errorf("two workers: cost %.17g, want the bits of %.17g", r.Cost, best)
	}
	if got := names(t, filepath.Join(dir, "new/two")); got != "results" {
		t.Errorf("results elsewhere: %s", got)
	}
}

// The lowest costs that a general least-squares library (Ceres 2.1.0) reached on published sets; a split changes none.
func TestAdjustPublished(t *testing.T) {
	for set, cost := range map[string]float64{"manhattan3500": 68.957439, "sphere2500": 675.70096} {
		t.Run(set, func(t *testing.T) {
			dir := t.TempDir()
			selvage(t, dir, "convert", "--from", "pose-tables", filepath.Join(shared(t), "datasets", set), "-o", "whole").want(t, 0)
			selvage(t, dir, "split", "whole", "-n", "5", "-o", "pieces").want(t, 0)
			for _, s := range []string{"whole", "pieces"} {
				if r := adjustJSON(t, 0, dir, s); !(math.Abs(r.Cost-cost) < 1e-7*cost) {
					t.Errorf("%s: cost %.9g, want %.9g", s, r.Cost, cost)
				}
			}
		})
	}
}

// The set with indefinite information is refused whole.
func TestConvertRefusesCubicle(t *testing.T) {
	dir := t.TempDir()
	a := selvage(t, dir, "convert", "--from", "pose-tables", filepath.Join(shared(t), "datasets", "cubicle"), "-o", "cubicle")
	a.want(t, exitInput, "5021 places are wrong, nothing was written\n  relative.csv.gz:4: column i00..i55: found an indefinite information matrix")
	if got := names(t, dir); got != "" {
		t.Errorf("left behind: %s", got)
	}
}
