package main

import (
	"encoding/json"
	"math"
	"strings"
	"testing"
)

// TestAdjustLeavesOutClosures rehearses with false loop closures: the adjustment of the folder leaves out those that the agents did not
// hold, and then agrees with the fleet; with all of them it is far off.
func TestAdjustLeavesOutClosures(t *testing.T) {
	dir := t.TempDir()
	write(t, dir, "small.yaml", small+"front_end: {false_closures: 0.2}\nfalse_ties: {independent: 0, clustered: 0}\n")
	a := selvage(t, dir, "rehearse", "small.yaml", "-o", "out", "--json")
	var s struct {
		Islands []struct {
			Whole float64 `json:"cost_one_piece"`
		} `json:"islands"`
		Closures struct {
			All, False struct{ Held, Refused, Open int }
		} `json:"closures"`
	}
	if err := json.Unmarshal([]byte(a.stdout), &s); err != nil {
		t.Fatal(err)
	}
	if c := s.Closures; c.False.Refused == 0 || c.False.Held > 0 || len(s.Islands) != 1 {
		t.Fatalf("%+v", s)
	}
	adjust := func(more ...string) (r adjustReport) {
		b := selvage(t, dir, append([]string{"adjust", "out", "--json"}, more...)...)
		if err := json.Unmarshal([]byte(b.stdout), &r); err != nil {
			t.Fatalf("%v in\n%s", err, b.stdout)
		}
		return r
	}
	r := adjust()
	if r.ClosuresOut != s.Closures.All.Refused+s.Closures.All.Open || math.Abs(r.Cost-s.Islands[0].Whole) > 1e-9*r.Cost {
		t.Errorf("%d closures left out, cost %.12g: the rehearsal had %+v and %.12g", r.ClosuresOut, r.Cost, s.Closures.All, s.Islands[0].Whole)
	}
	if r := adjust("--all-ties"); r.ClosuresOut != 0 || r.Cost < 100*s.Islands[0].Whole {
		t.Errorf("with all of them %d left out, cost %g", r.ClosuresOut, r.Cost)
	}
	if out := selvage(t, dir, "adjust", "out").stdout; !strings.Contains(out, "loop closures left out by verdict") {
		t.Error(out)
	}
}
