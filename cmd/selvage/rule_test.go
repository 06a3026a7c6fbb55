package main

import (
	"encoding/json"
	"path/filepath"
	"strings"
	"testing"
)

// A ruling counts in adjust and rehearse until it is withdrawn, and what the evidence said comes back then.
func TestRule(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	write(t, dir, "square/results/verdicts.csv", "# by hand\ntie,verdict,reason,chi_square,threshold,redundancy,detectable\ncut00001,held,agrees,,,,\ncut00002,refused,contradicts,,,,\n")
	rule := func(args ...string) answer { return selvage(t, dir, append([]string{"rule", "square"}, args...)...) }
	adjusted := func() (r adjustReport) {
		t.Helper()
		a := selvage(t, dir, "adjust", "square", "--json")
		a.want(t, 0)
		if err := json.Unmarshal([]byte(a.stdout), &r); err != nil {
			t.Fatal(err)
		}
		return r
	}
	verdict := func(tie string) map[string]string {
		for _, row := range columns(t, dir, "square/results/verdicts.csv") {
			if row["tie"] == tie {
				return row
			}
		}
		t.Fatalf("no verdict on %s", tie)
		return nil
	}
	if r := adjusted(); r.TiesHeld != 1 || len(r.Rulings) != 0 {
		t.Fatalf("before any ruling: %+v", r)
	}

	a := rule("--tie", "cut00002", "held", "--by", "lead", "--note", "by tape, twice")
	a.want(t, 0)
	if want := "Tie cut00002 of square is ruled held by lead: by tape, twice.\n"; a.stdout != want {
		t.Errorf("got %q, want %q", a.stdout, want)
	}
	r := adjusted()
	if r.TiesHeld != 2 || len(r.Rulings) != 1 || r.Rulings[0].Tie != "cut00002" || r.Rulings[0].Verdict != "held" || r.Rulings[0].On != "tie cut00002" ||
		r.Rulings[0].By != "lead" || r.Rulings[0].Note != "by tape, twice" || r.Rulings[0].Misclosure == nil || !(*r.Rulings[0].Misclosure > 0) {
		t.Errorf("ruled held: %+v", r)
	}
	if v := verdict("cut00002"); v["verdict"] != "held" || v["evidence"] != "refused" || !strings.HasPrefix(v["reason"], "ruled held by lead: by tape, twice; misclosure ") {
		t.Errorf("verdict %v", v)
	}

	rule("--robot", "p01", "refused", "--by", "second", "--note", "wheel slip").want(t, 0)
	if r := adjusted(); r.TiesHeld != 1 || len(r.Rulings) != 2 || strings.Join(r.TiesLeftOut, " ") != "cut00001" || r.Islands != 1 {
		t.Errorf("a robot refused, but for a tie ruled on by itself: %+v", r)
	}
	text := selvage(t, dir, "adjust", "square", "-o", "other")
	text.want(t, 0)
	for _, want := range []string{"1 tie of robot p01 is ruled refused by second: wheel slip.\n", "Tie cut00002 is ruled held by lead: by tape, twice. Its misclosure is "} {
		if !strings.Contains(text.stdout, want) {
			t.Errorf("%q is missing in\n%s", want, text.stdout)
		}
	}
	if r := selvage(t, dir, "adjust", "square", "--all-ties", "-o", "other"); !strings.Contains(r.stdout, "1 of 2") {
		t.Errorf("--all-ties lets a tie in that was ruled refused:\n%s", r.stdout)
	}

	rehearsed := selvage(t, dir, "rehearse", "--survey", "square", "--hold-all", "-o", "rehearsed")
	if rehearsed.code > 1 {
		rehearsed.want(t, 0)
	}
	if got, want := read(t, dir, "rehearsed/rulings.csv"), read(t, dir, "square/rulings.csv"); got != want {
		t.Errorf("the rehearsal wrote rulings\n%s\nwant\n%s", got, want)
	}
	again := selvage(t, dir, "rehearse", "--survey", "square", "--hold-all", "-o", "rehearsed") // over its like, with the same rulings
	if again.code != rehearsed.code {
		again.want(t, rehearsed.code)
	}
	for _, row := range columns(t, dir, "rehearsed/results/verdicts.csv") {
		want := map[string]string{"cut00001": "refused ruled refused by second (robot p01): wheel slip; it ", "cut00002": "held ruled held by lead: by tape, twice; misclosure "}[row["tie"]]
		if got := row["verdict"] + " " + row["reason"]; !strings.HasPrefix(got, want) {
			t.Errorf("the rehearsal says %q, want %q", got, want)
		}
	}
	page := read(t, dir, "rehearsed/results/report.html")
	for _, want := range []string{"Tie cut00002: ruled held by lead: by tape, twice; misclosure ", "1 tie of robot p01 is ruled refused by second: wheel slip; "} {
		if !strings.Contains(page, want) {
			t.Errorf("the report lacks %q", want)
		}
	}

	rule("--tie", "cut00002", "free", "--by", "lead", "--note", "tape was wrong").want(t, 0)
	rule("--session", "p01.1", "free", "--by", "lead", "--note", "slip was p02").want(t, 0)
	if r := adjusted(); r.TiesHeld != 0 { // the ruling on the robot still counts
		t.Errorf("a free session: %+v", r)
	}
	a = rule("--robot", "p01", "free", "--by", "lead", "--note", "slip was p02")
	a.want(t, 0)
	if want := "Robot p01 of square is left to the evidence again, by lead: slip was p02.\n"; a.stdout != want {
		t.Errorf("got %q, want %q", a.stdout, want)
	}
	if r := adjusted(); r.TiesHeld != 1 || len(r.Rulings) != 0 || strings.Join(r.TiesLeftOut, " ") != "cut00002" {
		t.Errorf("all withdrawn: %+v", r)
	}
	if v := verdict("cut00002"); v["verdict"] != "refused" || v["reason"] != "as it was before a ruling" {
		t.Errorf("verdict %v", v)
	}
	if n := strings.Count(read(t, dir, "square/rulings.csv"), "\n"); n != 6 {
		t.Errorf("%d lines in rulings.csv, want a header and five rulings", n)
	}
	if a := selvage(t, dir, "rehearse", "--survey", "whole", "-o", "rehearsed"); a.code != 2 || !strings.Contains(a.err, "what a person has decided") {
		t.Errorf("a folder with rulings was replaced: %d %s", a.code, a.err)
	}
}

func TestRuleRefuses(t *testing.T) {
	dir := t.TempDir()
	squareSurvey(t, dir)
	for _, c := range []struct {
		args string
		says string
	}{
		{"rule square --tie none held --by a --note b", `rulings.csv:2: column name: found "none", expected a tie that ties.csv lists`},
		{"rule square --robot none held --by a --note b", `rulings.csv:2: column name: found "none", expected a robot that survey.yaml lists`},
		{"rule square --session p01.9 held --by a --note b", `rulings.csv:2: column session: found 9, expected a session of robot p01 that survey.yaml lists`},
		{"rule square --session p01 held --by a --note b", "--session p01: expected a robot, a dot and a session number"},
		{"rule square --tie cut00001 maybe --by a --note b", "must be one of"},
		{"rule square --tie cut00001 --robot p01 held --by a --note b", "can't be used together"},
		{"rule square held --by a --note b", "missing flags"},
		{"rule square --tie cut00001 held --note b", "--by"},
		{"rule none --tie cut00001 held --by a --note b", "none"},
	} {
		selvage(t, dir, strings.Fields(c.args)...).want(t, 2, c.says)
	}
	if found, err := filepath.Glob(filepath.Join(dir, "square", "*ruling*")); err != nil || len(found) > 0 {
		t.Errorf("something was written: %v, %v", found, err)
	}
	if found, err := filepath.Glob(filepath.Join(dir, "square", ".*")); err != nil || len(found) > 0 {
		t.Errorf("something was left behind: %v, %v", found, err)
	}
}
