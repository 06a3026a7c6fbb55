package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"selvage/internal/audit"
)

// auditOf reads results/audit.json.
func auditOf(t *testing.T, dir string) *audit.Audit {
	t.Helper()
	var a audit.Audit
	if err := json.Unmarshal([]byte(read(t, dir, "results", "audit.json")), &a); err != nil {
		t.Fatal(err)
	}
	return &a
}

// The square cut in two is one loop of four measurements, two of them ties: they are held when asked, cannot be told apart, and
// stand in all three files.
func TestAudit(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	a := selvage(t, dir, "audit", "square", "--hold-all")
	a.want(t, 0)
	if !strings.Contains(a.stdout, "2 ties hold the map together: 2 checked and sound") || !strings.Contains(a.stdout, "cannot be told apart") {
		t.Errorf("it said:\n%s", a.stdout)
	}
	got := auditOf(t, filepath.Join(dir, "square"))
	if len(got.Sets) != 1 || len(got.Sets[0].Ties) != 2 || got.Sets[0].Odometry+got.Sets[0].Closures != 2 || got.Adjustment.DoF != 3 {
		t.Errorf("sets %+v, %d degrees of freedom", got.Sets, got.Adjustment.DoF)
	}
	rows := columns(t, dir, "square", "results", "ties.csv")
	if len(rows) != 2 || rows[0]["status"] != "passed" || rows[0]["set"] != "1" || rows[0]["detectable_x_m"] == "" || rows[0]["shift_is"] != "exact" {
		t.Errorf("ties.csv: %v", rows)
	}
	// One loop of equal measurements: every one has a quarter of the redundancy.
	sum := number(t, rows[0]["redundancy"]) + number(t, rows[1]["redundancy"])
	if sum < 0.3 || sum > 0.7 {
		t.Errorf("redundancies %s and %s", rows[0]["redundancy"], rows[1]["redundancy"])
	}
	if page := read(t, dir, "square", "results", "audit.html"); !strings.Contains(page, "2 ties hold the map together") {
		t.Error("the page lacks the finding")
	}
	if list := names(t, filepath.Join(dir, "square", "results")); list != "audit.html audit.json ties.csv" {
		t.Errorf("results: %s", list)
	}

	// Nobody has decided: the coordinator does, and two ties are not enough for it. Elsewhere, and as one object.
	a = selvage(t, dir, "audit", "square", "-o", "other", "--json")
	a.want(t, 0)
	if a.stdout != read(t, dir, "other", "results", "audit.json") {
		t.Error("--json prints something else than audit.json")
	}
	got = auditOf(t, filepath.Join(dir, "other"))
	for k := range got.Ties {
		if x := &got.Ties[k]; x.Verdict == "held" || x.Status != audit.Untested || x.T != nil {
			t.Errorf("%s: %s, %s", x.ID, x.Verdict, x.Status)
		}
	}
	if len(got.Islands) != 2 || !strings.HasPrefix(got.Decided, "the coordinator") {
		t.Errorf("%d islands, decided by %s", len(got.Islands), got.Decided)
	}

	// Verdicts that stand in the folder are taken, and what a person has ruled comes before.
	ties := columnsOfTies(t, filepath.Join(dir, "square"))
	write(t, dir, "square/results/verdicts.csv", "tie,verdict,reason,chi_square,threshold,redundancy,detectable\n"+ties[0]+",held,seen twice,,,,\n"+ties[1]+",refused,no,,,,\n")
	selvage(t, dir, "audit", "square").want(t, 0)
	got = auditOf(t, filepath.Join(dir, "square"))
	if got.Ties[0].Status != audit.Unchecked || got.Ties[1].Status != audit.Fits || !slices.Equal(got.Bridges, ties[:1]) || got.Ties[0].Reason != "seen twice" {
		t.Errorf("%+v", got.Ties)
	}
	selvage(t, dir, "rule", "square", "--tie", ties[0], "refused", "--by", "lead", "--note", "seen through a fence").want(t, 0)
	selvage(t, dir, "audit", "square").want(t, 0)
	if got = auditOf(t, filepath.Join(dir, "square")); got.Ties[0].Verdict != "refused" || !strings.Contains(got.Ties[0].Reason, "fence") {
		t.Errorf("%+v", got.Ties[0])
	}
}

// columnsOfTies lists the ids of the ties of a survey.
func columnsOfTies(t *testing.T, dir string) (ids []string) {
	t.Helper()
	for _, line := range strings.Split(strings.TrimSpace(read(t, dir, "ties.csv")), "\n")[1:] {
		id, _, _ := strings.Cut(line, ",")
		ids = append(ids, id)
	}
	return ids
}

// What cannot be audited is refused with what is wrong where, and nothing is written.
func TestAuditWrongInput(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	surveyOf(t, dir, "parts", 4, [][2]int{{0, 1}, {2, 3}})
	write(t, dir, "letters/love.txt", "not a survey\n")
	write(t, dir, "broken/survey.yaml", read(t, dir, "square", "survey.yaml"))
	for _, c := range []struct {
		args []string
		says string
	}{
		{[]string{"audit"}, "expected \"<survey>\""},
		{[]string{"audit", "nowhere"}, "nowhere"},
		{[]string{"audit", "letters"}, "letters is not empty and holds neither a survey nor results"},
		{[]string{"audit", "square", "-o", "letters"}, "letters is not empty"},
		{[]string{"audit", "broken"}, "keyframes.csv"},
	} {
		selvage(t, dir, c.args...).want(t, exitInput, c.says)
	}
	if list := names(t, filepath.Join(dir, "letters")); list != "love.txt" {
		t.Errorf("left behind: %s", list)
	}
	// A survey in parts, without ties, can be audited: it says that nothing joins them.
	a := selvage(t, dir, "audit", "parts")
	a.want(t, 0)
	if !strings.Contains(a.stdout, "No ties") {
		t.Errorf("it said:\n%s", a.stdout)
	}
	write(t, dir, "square/results/verdicts.csv", "tie,verdict,reason,chi_square,threshold,redundancy,detectable\nnone,held,,,,,\n")
	selvage(t, dir, "audit", "square").want(t, exitInput, "verdicts.csv", "the id of a tie of this survey")

	for _, step := range []error{os.Chmod(filepath.Dir(dir), 0o755), os.Chmod(filepath.Join(dir, "parts", "results"), 0o555)} {
		if step != nil {
			t.Fatal(step)
		}
	}
	finish(t, unprivileged(prepare(dir, "audit", "parts"))).want(t, exitEnvironment, "permission denied")
}
