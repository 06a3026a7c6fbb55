package main

import (
	"bufio"
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// small is a scenario of three robots and eight minutes.
const small = `name: small
title: Three robots in a short drift
seed: 4
duration_s: 500
site: {kind: mine, mine: {levels: 1, drifts: 2, cross_cuts: 3}}
fleet: {robots: 3, start_spread_s: 20}
`

// summary is what other programs read.
type summary struct {
	Accepted    *bool            `json:"accepted"`
	GapRelative *float64         `json:"gap_relative"`
	Rounds      *int             `json:"rounds"`
	Robots      []map[string]any `json:"robots"`
	Ties        map[string]any   `json:"ties"`
	Interrupted bool             `json:"interrupted"`
	Acceptance  []struct {
		Name  string   `json:"name"`
		Value *float64 `json:"value"`
		Limit *float64 `json:"limit"`
		OK    *bool    `json:"ok"`
	} `json:"acceptance"`
}

func summaryOf(t *testing.T, text string) summary {
	t.Helper()
	var s summary
	if err := json.Unmarshal([]byte(text), &s); err != nil {
		t.Fatalf("%v in\n%s", err, text)
	}
	return s
}

// The same file, seed and program give the same bytes; the exit code says whether it was accepted; the folder can be adjusted, and
// rehearsed as a recorded survey.
func TestRehearse(t *testing.T) {
	dir := t.TempDir()
	write(t, dir, "small.yaml", small)
	a := selvage(t, dir, "rehearse", "small.yaml", "--json")
	s := summaryOf(t, a.stdout)
	if s.Accepted == nil || s.GapRelative == nil || s.Rounds == nil || len(s.Robots) != 3 || len(s.Acceptance) != 5 {
		t.Fatalf("summary:\n%s", a.stdout)
	}
	all := true
	for _, c := range s.Acceptance {
		if c.Value == nil || c.Limit == nil || c.OK == nil {
			t.Fatalf("acceptance figure %s is not complete:\n%s", c.Name, a.stdout)
		}
		all = all && *c.OK
	}
	code := exitCheck
	if all {
		code = exitDone
	}
	a.want(t, code, "rehearsing small", "100 %", "writing rehearsal-small-4")
	if *s.Accepted != all || *s.GapRelative > 1e-9 {
		t.Errorf("accepted %v, all figures %v, gap %g", *s.Accepted, all, *s.GapRelative)
	}
	for _, name := range []string{"id", "joined", "bytes_up", "bytes_up_largest", "bytes_raw", "ate_alone_m", "ate_team_m"} {
		if s.Robots[2][name] == nil {
			t.Errorf("robot without %s: %v", name, s.Robots[2])
		}
	}
	if at := read(t, dir, "rehearsal-small-4/results/summary.json"); at != a.stdout {
		t.Error("--json and summary.json differ")
	}

	b := selvage(t, dir, "rehearse", "small.yaml", "-o", "again", "--no-progress")
	b.want(t, code)
	for _, word := range []string{"Robots at the end", "error in team", "gap", "rounds", "held", "refused", "open"} {
		if !strings.Contains(b.stdout, word) {
			t.Errorf("the table lacks %q:\n%s", word, b.stdout)
		}
	}
	if strings.Contains(b.err, "rehearsing") {
		t.Errorf("--no-progress says\n%s", b.err)
	}
	for _, name := range []string{"survey.yaml", "ties.csv", "truth.csv", "robots/r02/keyframes.csv", "robots/r02/relative.csv", "results/summary.json",
		"results/report.html", "results/poses.csv", "results/verdicts.csv", "results/datum_from_session.csv"} {
		if read(t, dir, "again", name) != read(t, dir, "rehearsal-small-4", name) {
			t.Errorf("%s differs between two runs of one seed", name)
		}
	}
	other := selvage(t, dir, "rehearse", "small.yaml", "--seed", "5", "--robots", "2", "--false", "0", "--clustered", "0", "--json")
	if o := summaryOf(t, other.stdout); len(o.Robots) != 2 || !strings.Contains(names(t, dir), "rehearsal-small-5") {
		t.Errorf("with --seed 5 --robots 2: %d robots, folders %s", len(o.Robots), names(t, dir))
	} else if f := o.Ties["false"].(map[string]any); f["held"].(float64)+f["refused"].(float64)+f["open"].(float64)+f["unheard"].(float64) != 0 {
		t.Errorf("with --false 0 --clustered 0: false ties %v", f)
	}

	selvage(t, dir, "adjust", "again").want(t, 0)
	recorded := selvage(t, dir, "rehearse", "--survey", "again", "--json")
	recorded.want(t, 0, "writing rehearsal-small")
	if r := summaryOf(t, recorded.stdout); !*r.Accepted || *r.GapRelative > 1e-9 {
		t.Errorf("as a recorded survey: accepted %v, gap %g", *r.Accepted, *r.GapRelative)
	}
	bus := selvage(t, dir, "rehearse", "--survey", "again", "--real-bus", "-o", "bus", "--json")
	bus.want(t, 0)
	if r := summaryOf(t, bus.stdout); *r.GapRelative > 1e-9 {
		t.Errorf("on the real bus: gap %g", *r.GapRelative)
	}
}

// What a person can get wrong ends with code 2 and changes nothing.
func TestRehearseWrongInput(t *testing.T) {
	dir := t.TempDir()
	write(t, dir, "small.yaml", small)
	write(t, dir, "wheels.yaml", small+"wheels: 4\n")
	write(t, dir, "broken.yaml", "name: [x\n")
	write(t, dir, "long.yaml", strings.Repeat("# long\n", 20000))
	write(t, dir, "letters/love.txt", "not a rehearsal\n")
	write(t, dir, "file", "text\n")
	surveyOf(t, dir, "chain", 6, chain(6))
	before := names(t, dir)
	for _, c := range []struct{ args, says string }{
		{"rehearse nowhere", `scenario "nowhere": no such file, and the built-in ones are mine, store, wood`},
		{"rehearse letters", "is a folder, expected a YAML file"},
		{"rehearse wheels.yaml", "wheels.yaml:7:1: wheels: unknown field"},
		{"rehearse broken.yaml", "broken.yaml:1:7: not YAML"},
		{"rehearse long.yaml", "expected at most"},
		{"rehearse small.yaml mine", "unexpected argument mine"},
		{"rehearse small.yaml -o letters", "letters is not empty and holds no earlier rehearsal"},
		{"rehearse small.yaml -o chain", "chain is not empty and holds no earlier rehearsal"},
		{"rehearse small.yaml -o file", "file is a file, expected a new folder"},
		{"rehearse small.yaml -o file/in/it", "not a directory"},
		{"rehearse --survey missing", "missing: no such file"},
		{"rehearse --survey letters", "survey.yaml: found no such file"},
		{"rehearse --survey chain --seed 3", "--survey goes without"},
		{"rehearse small.yaml --survey chain", "--survey goes without"},
		{"rehearse small.yaml --robots 0", "fleet.robots: found 0, expected 1 to 60"},
		{"rehearse small.yaml --robots many", "--robots"},
		{"rehearse small.yaml --false 1.5", "false_ties.independent: found 1.5"},
		{"rehearse small.yaml --false nan", "false_ties.independent: found NaN"},
		{"rehearse small.yaml --clustered -1", "--clustered"},
		{"rehearse small.yaml --seed -1", "--seed"},
	} {
		t.Run(c.args, func(t *testing.T) {
			a := selvage(t, dir, strings.Fields(c.args)...)
			a.want(t, exitInput, c.says)
			if a.stdout != "" {
				t.Errorf("on standard output: %q", a.stdout)
			}
			if now := names(t, dir); now != before {
				t.Errorf("left behind: %s, was %s", now, before)
			}
		})
	}
	fixed := filepath.Join(dir, "fixed")
	if err := os.Mkdir(fixed, 0o555); err != nil {
		t.Fatal(err)
	}
	for _, d := range []string{filepath.Dir(dir), dir} {
		if err := os.Chmod(d, 0o755); err != nil {
			t.Fatal(err)
		}
	}
	finish(t, unprivileged(prepare(dir, "rehearse", "small.yaml", "-o", "fixed/new/inner"))).want(t, exitEnvironment, "permission denied")
}

// An interrupt ends the run where it is, and what was finished is kept.
func TestRehearseInterrupt(t *testing.T) {
	dir := t.TempDir()
	cmd := prepare(dir, "rehearse", "-o", "out")
	said, err := cmd.StderrPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	lines := bufio.NewScanner(said)
	for lines.Scan() && !strings.Contains(lines.Text(), "10 %") {
	}
	if err := cmd.Process.Signal(syscall.SIGINT); err != nil {
		t.Fatal(err)
	}
	last := ""
	for lines.Scan() {
		last = lines.Text()
	}
	_ = cmd.Wait() // the code is checked below
	if code := cmd.ProcessState.ExitCode(); code != exitCheck || last != "selvage: interrupted; out holds what was finished" {
		t.Errorf("exit code %d, said %q", code, last)
	}
	s := summaryOf(t, read(t, dir, "out/results/summary.json"))
	if !s.Interrupted || *s.Accepted || s.GapRelative != nil || names(t, dir) != "out" {
		t.Errorf("summary %+v, left behind %s", s, names(t, dir))
	}
	selvage(t, dir, "adjust", "out").want(t, 0)
}
