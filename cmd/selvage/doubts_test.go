package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// remark rewrites marks.csv, line by line as cells.
func remark(t *testing.T, folder string, change func(cells []string)) {
	t.Helper()
	path := filepath.Join(folder, "marks.csv")
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(strings.TrimSuffix(string(data), "\n"), "\n")
	for i := range lines {
		cells := strings.Split(lines[i], ",")
		change(cells)
		lines[i] = strings.Join(cells, ",")
	}
	if err := os.WriteFile(path, []byte(strings.Join(lines, "\n")+"\n"), 0o644); err != nil {
		t.Fatal(err)
	}
}

// Marks that something is wrong with are named, by the adjustment and by the audit: a control point that its sightings contradict,
// check points that are exchanged, and points that nobody has seen. Where nothing is wrong, nothing is named.
func TestDoubtfulMarks(t *testing.T) {
	dir := t.TempDir()
	yard(t, dir, make([][2]float64, 7))
	sound := selvage(t, dir, "adjust", "yard")
	sound.want(t, 0)
	doubts := []string{
		"Nobody has seen control point k77.",
		"The map has check points c0 (54.6 m) and c23 (54.6 m) more than 5 times as far off as half of all", // (21.9, 50) m apart
		"Check points c0 and c23 each lie where the other was surveyed: they may be exchanged.",
		"Of control point k3 10 of 10 sightings are left out, for they contradict its coordinates",
	}
	for _, says := range []string{"Nobody", "far off", "exchanged", "contradict", "-0.000"} {
		if strings.Contains(sound.stdout, says) {
			t.Errorf("%q of sound marks in\n%s", says, sound.stdout)
		}
	}

	yard(t, dir, [][2]float64{{}, {}, {}, {2, 0}, {}, {}, {}})
	remark(t, filepath.Join(dir, "yard"), func(cells []string) {
		switch cells[0] {
		case "c0":
			cells[0] = "c23"
		case "c23":
			cells[0] = "c0"
		case "k6":
			cells[7] += "\nk77,control,1,1,0,0.01,0.01,inf"
		}
	})
	a := selvage(t, dir, "adjust", "yard")
	a.want(t, 0)
	b := selvage(t, dir, "audit", "yard")
	page := read(t, dir, "yard", "results", "audit.html")
	for i, says := range doubts {
		if !strings.Contains(a.stdout, says) {
			t.Errorf("no %q in\n%s", says, a.stdout)
		}
		if i < 3 && (!strings.Contains(b.stdout, says) || !strings.Contains(page, says)) { // it releases k3
			t.Errorf("no %q on the terminal or the page of the audit:\n%s", says, b.stdout)
		}
	}
	if !strings.Contains(b.stdout, "Control point k3 is not where its coordinates say") || strings.Contains(b.stdout, doubts[3]) {
		t.Errorf("the audit of k3:\n%s", b.stdout)
	}
}

// In the first run of a public data set of five robots (Leung, Halpern, Barfoot and Liu, "The UTIAS multi-robot cooperative localization
// and mapping dataset", IJRR 30(8), 2011) the rows of landmarks 11 and 17 are exchanged, as a public copy that carries them the other
// way round shows. The comparison finds it.
func TestExchangedLandmarks(t *testing.T) {
	log := filepath.Join(shared(t), "datasets", "mrclam", "run1")
	dir := t.TempDir()
	selvage(t, dir, "convert", "--from", "sighting-log", log, "--to-s", "120", "--thin-s", "1", "-o", "room").want(t, 0)
	remark(t, filepath.Join(dir, "room"), func(cells []string) {
		switch cells[0] {
		case "m6", "m9", "m10", "m12", "m19":
			cells[1] = "control"
		}
	})
	a := selvage(t, dir, "adjust", "room")
	a.want(t, 0)
	if says := "Check points m11 and m17 each lie where the other was surveyed: they may be exchanged."; !strings.Contains(a.stdout, says) || strings.Count(a.stdout, "exchanged") != 1 {
		t.Errorf("want %q once in\n%s", says, a.stdout)
	}
}
