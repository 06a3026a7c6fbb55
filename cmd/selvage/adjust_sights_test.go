package main

import (
	"encoding/csv"
	"math"
	"path/filepath"
	"strings"
	"testing"

	"selvage/internal/lie"
)

// teamError is the root mean square distance of the poses in results from truth.csv of a survey after one rigid motion of all.
func teamError(t *testing.T, dir, survey, results string) float64 {
	t.Helper()
	truth := map[[3]string][3]float64{}
	rows, err := csv.NewReader(strings.NewReader(read(t, dir, survey, "truth.csv"))).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	at := map[string]int{}
	for i, name := range rows[0] {
		at[name] = i
	}
	for _, r := range rows[1:] {
		truth[[3]string{r[at["robot"]], r[at["session"]], r[at["key"]]}] = [3]float64{number(t, r[at["x_m"]]), number(t, r[at["y_m"]])}
	}
	var est, real [][3]float64
	for _, r := range columns(t, dir, results, "results", "poses.csv") {
		if x, ok := truth[[3]string{r["robot"], r["session"], r["id"]}]; ok {
			est, real = append(est, [3]float64{number(t, r["x_m"]), number(t, r["y_m"])}), append(real, x)
		}
	}
	move, ok := lie.FitPoints(true, est, real, nil)
	if !ok || len(est) < 1000 {
		t.Fatalf("%d poses with truth", len(est))
	}
	sum := 0.0
	for i, x := range est {
		q := move.Apply(x)
		sum += (q[0]-real[i][0])*(q[0]-real[i][0]) + (q[1]-real[i][1])*(q[1]-real[i][1])
	}
	return math.Sqrt(sum / float64(len(est)))
}

// A recorded team, from its log to poses and verdicts: Leung, Halpern, Barfoot, Liu, "The UTIAS multi-robot cooperative localization
// and mapping dataset", International Journal of Robotics Research 30(8), 2011, run 6, five minutes, frames unknown, marks of each
// robot its own.
func TestAdjustRecordedTeam(t *testing.T) {
	dir := t.TempDir()
	log := filepath.Join(shared(t), "datasets", "mrclam", "run6")
	selvage(t, dir, "convert", "--from", "sighting-log", log, "-o", "team", "--to-s", "300", "--marks", "private").want(t, 0)
	r := adjustJSON(t, 0, dir, "team", "-o", "robust")
	whole := teamError(t, dir, "team", "robust")
	frames := adjustJSON(t, 0, dir, "team", "-o", "frames", "--frames-only")
	frozen := teamError(t, dir, "team", "frames")
	t.Logf("%.3f m in %d steps, %d of %d sightings left out; frames only %.3f m in %d steps", whole, r.Iterations, r.SightingsCut, r.Sightings, frozen, frames.Iterations)
	if whole > 0.13 || frozen > 0.25 || r.Islands != 1 || r.SightingsCut == 0 || float64(r.SightingsCut) > 0.03*float64(r.Sightings) {
		t.Errorf("%.3f m, frames only %.3f m, %d islands, %d of %d left out", whole, frozen, r.Islands, r.SightingsCut, r.Sightings)
	}
	for _, p := range columns(t, dir, "frames/results/poses.csv")[:5] {
		if p["cov_x_x"] != "" {
			t.Errorf("a covariance %q of a frozen map", p["cov_x_x"])
		}
	}

	// Every tie is less than a pose, and has a verdict that its own statistic bears out.
	refused, ties := 0, columns(t, dir, "robust/results/verdicts.csv")
	for _, v := range ties {
		over := number(t, v["chi_square"]) > number(t, v["threshold"])
		switch {
		case v["threshold"] != "13.816":
			t.Errorf("%v: threshold, want chi-square of two at one in a thousand", v)
		case v["verdict"] == "held" && (over || !strings.HasPrefix(v["reason"], "agrees with what the others predict: ")),
			v["verdict"] == "refused" && !over && !strings.Contains(v["reason"], "no longer predict"):
			t.Errorf("%v", v)
		case v["verdict"] == "refused":
			refused++
		}
	}
	if len(ties) != r.Ties || refused == 0 || float64(refused) > 0.03*float64(len(ties)) {
		t.Errorf("%d of %d ties refused, %d in the survey", refused, len(ties), r.Ties)
	}

	a := selvage(t, dir, "adjust", "team", "-o", "plain", "--all-sightings", "--max-iterations", "40", "--json")
	if plain := teamError(t, dir, "team", "plain"); plain < whole || !strings.Contains(a.stdout, `"sightings_left_out": 0`) {
		t.Errorf("every sighting believed: %.3f m, else %.3f", plain, whole)
	}
}

func TestAdjustFramesOnlyRefuses(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	for args, says := range map[string]string{
		"--frames-only":                 "frames only: there are no own maps",
		"--frames-only --all-sightings": "--frames-only goes without --all-sightings and --place",
		"--frames-only --start given":   "expected another --start than given",
		"--frames-only --place=robust":  "--frames-only goes without --all-sightings and --place",
	} {
		selvage(t, dir, append([]string{"adjust", "square"}, strings.Fields(args)...)...).want(t, exitInput, says)
	}
	if got := names(t, filepath.Join(dir, "square")); strings.Contains(got, "results") {
		t.Errorf("results were written: %s", got)
	}
}
