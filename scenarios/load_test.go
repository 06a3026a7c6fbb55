package scenarios

import (
	"errors"
	"fmt"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

func TestBuiltins(t *testing.T) {
	for _, name := range BuiltinNames() {
		sc, err := Builtin(name)
		if err != nil {
			t.Fatal(err)
		}
		if sc.Name != name || sc.Site.Kind != name || sc.Fleet.Robots != 6 {
			t.Errorf("%s: name %s, kind %s, %d robots", name, sc.Name, sc.Site.Kind, sc.Fleet.Robots)
		}
		sc.Fleet.Robots = 30 // the next caller gets a fresh copy
		if again, _ := Builtin(name); again.Fleet.Robots != 6 {
			t.Errorf("%s: a change in one copy shows in the next", name)
		}
	}
	if _, err := Builtin("../mine"); err == nil || !strings.Contains(err.Error(), "mine, store, wood") {
		t.Errorf("an unknown name gave %v", err)
	}
}

func TestEmptyFileIsDefault(t *testing.T) {
	for _, data := range []string{"", "\n# nothing\n"} {
		sc, err := Load([]byte(data), "x.yaml")
		if err != nil {
			t.Fatal(err)
		}
		if d := cmp.Diff(Default(), sc); d != "" {
			t.Errorf("an empty file changes the default:\n%s", d)
		}
	}
}

func TestLoadSetsFields(t *testing.T) {
	sc, err := Load([]byte(`
name: a-1
title: "Two: words"
seed: 18446744073709551615
duration_s: 600
site: {kind: wood, wood: {clearings: 20}}
fleet:
  robots: 3
  reach_m: 1e2
radio:
  base_m: [1, -2.5, 3]
  range_m: 0
  outages:
    - {robot: r03, from_s: 1, to_s: 2}
    - robot: all
      from_s: 5
      to_s: 60
`), "x.yaml")
	if err != nil {
		t.Fatal(err)
	}
	want := Default()
	want.Name, want.Title, want.Seed, want.Duration = "a-1", "Two: words", 18446744073709551615, 600
	want.Site.Kind, want.Site.Wood.Clearings = "wood", 20
	want.Fleet.Robots, want.Fleet.Reach = 3, 100
	want.Radio.Base, want.Radio.Range = &[3]float64{1, -2.5, 3}, 0
	want.Radio.Outages = []OutageSpec{{"r03", 1, 2}, {"all", 5, 60}}
	if d := cmp.Diff(want, sc); d != "" {
		t.Error(d)
	}
}

// Each file has one mistake and one message.
func TestBadFiles(t *testing.T) {
	for _, c := range []struct{ yaml, message string }{
		{"fleet:\n  robotz: 6\n", "x.yaml:2:3: fleet.robotz: unknown field, expected one of robots, start_spread_s, speed_min_mps, speed_max_mps, keyframe_spacing_m, reach_m"},
		{"robots: 6\n", "x.yaml:1:1: robots: unknown field, expected one of name, title, seed, duration_s, site, fleet, front_end, ties, marks, false_ties, radio"},
		{"fleet:\n  robots: 61\n", "x.yaml:2:11: fleet.robots: found 61, expected 1 to 60"},
		{"fleet:\n  robots: 2.5\n", `x.yaml:2:11: fleet.robots: found "2.5", expected a whole number`},
		{"fleet:\n  robots: many\n", `x.yaml:2:11: fleet.robots: found "many", expected a whole number`},
		{"fleet:\n  robots:\n", "x.yaml:2:3: fleet.robots: is empty, expected a value (or leave the field out)"},
		{"fleet: 6\n", `x.yaml:1:8: fleet: found "6", expected fields: robots, start_spread_s, speed_min_mps, speed_max_mps, keyframe_spacing_m, reach_m`},
		{"seed: 1\nseed: 2\n", `x.yaml:2:1: not YAML: mapping key "seed" already defined at [1:1]`},
		{"seed: -1\n", `x.yaml:1:7: seed: found "-1", expected a whole number from 0 to 18446744073709551615`},
		{"radio: {loss: 1.5}\n", "x.yaml:1:15: radio.loss: found 1.5, expected 0 to 1"},
		{"radio: {loss: .nan}\n", `x.yaml:1:15: radio.loss: found ".nan", expected a number`},
		{"radio: {loss: 1e999}\n", `x.yaml:1:15: radio.loss: found "1e999", expected a number`},
		{"radio: {loss: \"0.5\"}\n", `x.yaml:1:15: radio.loss: found "0.5", expected a number`},
		{"radio: {base_m: [1, 2]}\n", "x.yaml:1:17: radio.base_m: found 2 entries, expected 3"},
		{"radio: {base_m: [1, 2, x]}\n", `x.yaml:1:24: radio.base_m[2]: found "x", expected a number`},
		{"radio:\n  outages:\n    - {robot: r07, from_s: 1, to_s: 2}\n", "x.yaml:3:15: radio.outages[0].robot: names no robot of the fleet, expected r01 to r06, or all"},
		{"radio:\n  outages:\n    - {robot: all, from_s: 2, to_s: 2}\n", "x.yaml:3:37: radio.outages[0].to_s: is not after from_s, expected a later time"},
		{"radio:\n  outages: all\n", `x.yaml:2:12: radio.outages: found "all", expected a list`},
		{"site: {kind: castle}\n", `x.yaml:1:14: site.kind: found "castle", expected one of mine, store, wood`},
		{"site: {kind: store, store: {width_m: 3.8}}\n", "x.yaml:1:38: site.store.width_m: leaves less than 0.4 m for the racks, expected pitch_m - 0.4 or less"},
		{"site: {mine: {cross_cuts: 1}}\n", "x.yaml:1:27: site.mine.cross_cuts: found 1, expected 0 or 2 and more"},
		{"site: {wood: {clearings: 3}}\n", "x.yaml:1:26: site.wood.clearings: found 3, expected 0 or 4 and more"},
		{"name: a b\n", `x.yaml:1:7: name: found "a b", expected 1 to 32 letters, digits, _ and -, the first a letter or digit`},
		{"title: \"a\\tb\"\n", `x.yaml:1:8: title: found "a\tb", expected one line of printable text, 1 to 200 bytes`},
		{"title: &a b\n", `x.yaml:1:8: title: found "&", expected text`},
		{"false_ties: {independent: 0.5, clustered: 0.5}\n", "x.yaml:1:43: false_ties.clustered: makes more than 0.9 together with independent, expected at most that"},
		{"fleet: {speed_min_mps: 2}\n", "x.yaml:1:24: fleet.speed_min_mps: is above speed_max_mps, expected at most that"},
		{"duration_s: 100\n", "x.yaml: fleet.start_spread_s: is more than half of duration_s, expected at most that"},
		{"duration_s: 28000\nfleet: {robots: 60, keyframe_spacing_m: 0.25}\n", "x.yaml:2:41: fleet.keyframe_spacing_m: makes up to 6720000 keyframes in all, expected at most 1000000"},
		{"seed: 1\n---\nseed: 2\n", "x.yaml: the file holds 2 documents, expected one"},
		{strings.Repeat("[", 33), "x.yaml: 33 brackets are open at once, expected at most 32"},
		{"- 1\n", "x.yaml:1:1: found Sequence, expected fields: name, title, seed, duration_s, site, fleet, front_end, ties, marks, false_ties, radio"},
		{"radio: {loss: 0.1\n", "x.yaml:1:8: not YAML: could not find flow mapping end token '}'"},
	} {
		_, err := Load([]byte(c.yaml), "x.yaml")
		if err == nil {
			t.Errorf("%q was accepted", c.yaml)
			continue
		}
		if err.Error() != c.message {
			t.Errorf("%q:\n got %s\nwant %s", c.yaml, err, c.message)
		}
	}
}

func TestAllMistakesAtOnce(t *testing.T) {
	_, err := Load([]byte("radio:\n  loss: 2\nfleet:\n  robots: 0\n  colour: red\nseed: x\n"), "x.yaml")
	var all FieldErrors
	if !errors.As(err, &all) || len(all) != 4 {
		t.Fatalf("got %v", err)
	}
	for i, path := range []string{"radio.loss", "fleet.robots", "fleet.colour", "seed"} {
		if all[i].Path != path {
			t.Errorf("error %d is about %s, want %s", i, all[i].Path, path)
		}
	}
	if _, err := Load([]byte(strings.Repeat("a: 1\n", maxFile)), "x.yaml"); err == nil || !strings.Contains(err.Error(), "expected at most") {
		t.Errorf("a file too large gave %v", err)
	}
	var many strings.Builder
	for i := range 500 {
		fmt.Fprintf(&many, "a%d: 1\n", i)
	}
	if _, err := Load([]byte(many.String()), "x.yaml"); err == nil || !strings.Contains(err.Error(), "400 more errors") {
		t.Errorf("500 mistakes gave %v", err)
	}
}

func TestSimulateValidates(t *testing.T) {
	sc := Default()
	sc.Fleet.Robots = 0
	sc.Radio.Loss = -1
	_, err := Simulate(sc, 1)
	var all FieldErrors
	if !errors.As(err, &all) || len(all) != 2 {
		t.Errorf("got %v", err)
	}
}

func FuzzLoad(f *testing.F) {
	for _, name := range BuiltinNames() {
		data, err := builtin.ReadFile("builtin/" + name + ".yaml")
		if err != nil {
			f.Fatal(err)
		}
		f.Add(data)
	}
	f.Add([]byte("a: &x [*x]\n<<: *x\n"))
	f.Add([]byte("? [1]\n: {}\n"))
	f.Fuzz(func(t *testing.T, data []byte) {
		sc, err := Load(data, "x.yaml")
		if (sc == nil) == (err == nil) {
			t.Fatalf("scenario %v with error %v", sc, err)
		}
		if err == nil && sc.Validate() != nil {
			t.Fatalf("an invalid scenario was accepted: %v", sc.Validate())
		}
	})
}
