package survey

import (
	"errors"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

func TestVerdictsReadBack(t *testing.T) {
	s := &Survey{Ties: []Tie{{ID: "a"}, {ID: "b.1"}, {ID: "c"}}}
	dir := t.TempDir()
	if got, err := ReadVerdicts(dir, s); err != nil || got != nil {
		t.Errorf("without results: %v, %v", got, err)
	}
	nan := math.NaN()
	want := []ResultVerdict{
		{Tie: "c", Verdict: "refused", Reason: `contradicted, by "a"`, ChiSquare: 99.25, Threshold: 16.8, Redundancy: nan, Detectable: 0.1},
		{Tie: "a", Verdict: "held", ChiSquare: nan, Threshold: nan, Redundancy: nan, Detectable: nan},
	}
	if err := ResultsReplaceable(dir); err != nil {
		t.Error(err)
	}
	if err := WriteResults(dir, nil, want, nil, "epoch 7"); err != nil {
		t.Fatal(err)
	}
	if err := ResultsReplaceable(dir); err != nil {
		t.Error(err)
	}
	got, err := ReadVerdicts(dir, s)
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(want, got, cmpopts.EquateNaNs()); d != "" {
		t.Error(d)
	}
}

func TestBadVerdicts(t *testing.T) {
	const head = "# note\ntie,verdict,reason,chi_square,threshold,redundancy,detectable\n"
	for _, c := range []struct{ rows, want string }{
		{"b,held,,,,,\n", `results/verdicts.csv:3: column tie: found "b", expected the id of a tie of this survey`},
		{"a,held,,,,,\na,held,,,,,\n", `results/verdicts.csv:4: column tie: found "a" a second time, expected each tie once`},
		{"a,maybe,,,,,\n", `results/verdicts.csv:3: column verdict: found "maybe", expected held, refused or open`},
		{"a,held,x\x01,,,,\n", `results/verdicts.csv:3: column reason: found "x\x01", expected one line of printable text`},
		{"a,held,,NaN,,,\n", `results/verdicts.csv:3: column chi_square: found "NaN", expected a finite decimal number`},
		{"a,held\n", `results/verdicts.csv:3: found 2 fields, expected 7 as in the header line`},
	} {
		dir := t.TempDir()
		if err := os.Mkdir(filepath.Join(dir, resultsName), 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(dir, resultsName, "verdicts.csv"), []byte(head+c.rows), 0o644); err != nil {
			t.Fatal(err)
		}
		got, err := ReadVerdicts(dir, &Survey{Ties: []Tie{{ID: "a"}}})
		var bad *Violations
		if !errors.As(err, &bad) || err.Error() != c.want || got != nil {
			t.Errorf("%q: %v, want %s", c.rows, err, c.want)
		}
	}
}

func TestResultsReplaceable(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"day,price\n1,2\n", "column robot: found no such column"},
		{"", "an empty file"},
		{"# of mine\n# and more\n", "found no such column"},
	} {
		dir := t.TempDir()
		if err := os.Mkdir(filepath.Join(dir, resultsName), 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(dir, resultsName, "poses.csv"), []byte(c.text), 0o644); err != nil {
			t.Fatal(err)
		}
		if err := ResultsReplaceable(dir); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: %v, want %s", c.text, err, c.want)
		}
	}
}
