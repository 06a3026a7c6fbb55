package scenarios

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"testing"

	"pgregory.net/rapid"

	"selvage/internal/survey"
)

// world simulates a built-in scenario after a change.
func world(t testing.TB, name string, seed uint64, change func(*Scenario)) (*Scenario, *World) {
	t.Helper()
	sc, err := Builtin(name)
	if err != nil {
		t.Fatal(err)
	}
	if change != nil {
		change(sc)
	}
	w, err := Simulate(sc, seed)
	if err != nil {
		t.Fatal(err)
	}
	return sc, w
}

func short(sc *Scenario) { sc.Duration = 900 }

func TestSameSeedSameBytes(t *testing.T) {
	for _, name := range BuiltinNames() {
		var runs [3]map[string][]byte
		for i, seed := range []uint64{3, 3, 4} {
			_, w := world(t, name, seed, short)
			dir := filepath.Join(t.TempDir(), "s")
			if err := survey.Write(dir, w.Survey); err != nil { // reads back what it wrote: the survey is sound
				t.Fatal(err)
			}
			runs[i] = files(t, dir)
		}
		for file, data := range runs[0] {
			if !bytes.Equal(data, runs[1][file]) {
				t.Errorf("%s: %s differs between two runs of one seed", name, file)
			}
		}
		if len(runs[0]) < 15 || len(runs[0]) != len(runs[1]) {
			t.Errorf("%s: %d and %d files", name, len(runs[0]), len(runs[1]))
		}
		if bytes.Equal(runs[0]["ties.csv"], runs[2]["ties.csv"]) {
			t.Errorf("%s: two seeds give the same ties", name)
		}
	}
}

func files(t *testing.T, dir string) map[string][]byte {
	t.Helper()
	all := map[string][]byte{}
	err := filepath.WalkDir(dir, func(path string, d fs.DirEntry, err error) error {
		if err != nil || d.IsDir() {
			return err
		}
		data, err := os.ReadFile(path)
		rel, _ := filepath.Rel(dir, path)
		all[rel] = data
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return all
}

// A stream belongs to its name and seed for good: worlds drawn today can be drawn again.
func TestStreamsArePinned(t *testing.T) {
	for _, c := range []struct {
		seed uint64
		name string
		want [2]uint64
	}{
		{1, "site", [2]uint64{0x2cda50e756daaa4, 0x7a5726df868d2ed}},
		{1, "walk/r01", [2]uint64{0xb5a17f12821114e4, 0xa6f81b99816698b5}},
		{2, "site", [2]uint64{0xe49f5704977f9b29, 0xd635932b714301ad}},
	} {
		rng := stream(c.seed, c.name)
		if got := [2]uint64{rng.Uint64(), rng.Uint64()}; got != c.want {
			t.Errorf("stream %d %s starts with %#x, want %#x", c.seed, c.name, got, c.want)
		}
	}
}

// A change in one part leaves the draws of the others alone.
func TestPartsAreIndependent(t *testing.T) {
	_, plain := world(t, "mine", 1, short)
	_, noFalse := world(t, "mine", 1, func(sc *Scenario) { short(sc); sc.FalseTies.Independent, sc.FalseTies.Clustered = 0, 0 })
	_, noTies := world(t, "mine", 1, func(sc *Scenario) { short(sc); sc.Ties.EncounterRange, sc.Ties.RevisitRange = 0, 0 })
	_, coarse := world(t, "mine", 1, func(sc *Scenario) { short(sc); sc.FrontEnd.Odometry.Rotation *= 2 })
	if !reflect.DeepEqual(plain.Survey.Robots, noFalse.Survey.Robots) || !reflect.DeepEqual(plain.Survey.Robots, noTies.Survey.Robots) {
		t.Error("ties change what robots measure of themselves")
	}
	if !reflect.DeepEqual(plain.Survey.Truth, coarse.Survey.Truth) || !reflect.DeepEqual(plain.Survey.Ties, coarse.Survey.Ties) {
		t.Error("odometry changes tracks or ties")
	}
	var kept []survey.Pose
	for i, tie := range plain.Survey.Ties {
		if plain.TieTrue[i] {
			kept = append(kept, tie.Pose)
		}
	}
	if len(kept) != len(noFalse.Survey.Ties) || len(noTies.Survey.Ties) != 0 {
		t.Fatalf("%d true ties, %d without false ones, %d with none", len(kept), len(noFalse.Survey.Ties), len(noTies.Survey.Ties))
	}
	for i, tie := range noFalse.Survey.Ties {
		if tie.Pose != kept[i] {
			t.Fatalf("true tie %d differs without false ones", i)
		}
	}
}

// soundFeed checks that each row is delivered once, in the order of time, after the keyframes that it needs.
func soundFeed(w *World) error {
	ties := make([]int, len(w.Survey.Ties))
	for r, events := range w.Feed {
		robot := &w.Survey.Robots[r]
		row := func(session uint32, key int64) int { // sessions follow each other, their keys count from 0
			n := 0
			for n < len(robot.Keyframes) && robot.Keyframes[n].Session < session {
				n++
			}
			return n + int(key)
		}
		keys, rels := make([]int, len(robot.Keyframes)), make([]int, len(robot.Relatives))
		last := int64(math.MinInt64)
		for _, e := range events {
			if e.AtNS < last || e.AtNS > w.EndNS {
				return fmt.Errorf("%s: event at %d after %d, end %d", robot.ID, e.AtNS, last, w.EndNS)
			}
			last = e.AtNS
			switch e.Kind {
			case KeyframeEvent:
				keys[e.Index]++
				if k := robot.Keyframes[e.Index]; k.StampNS != e.AtNS || !k.HasStamp {
					return fmt.Errorf("%s: keyframe of %d comes at %d", robot.ID, k.StampNS, e.AtNS)
				}
			case RelativeEvent:
				rels[e.Index]++
				if m := robot.Relatives[e.Index]; m.From >= m.To || keys[row(m.Session, m.From)] == 0 || keys[row(m.Session, m.To)] == 0 {
					return fmt.Errorf("%s: relative %d to %d comes before its keyframes", robot.ID, m.From, m.To)
				}
			case TieEvent:
				ties[e.Index]++
				tie := w.Survey.Ties[e.Index]
				if tie.FromRobot != robot.ID || keys[row(tie.FromSession, tie.FromKey)] == 0 {
					return fmt.Errorf("%s: tie %s from %s comes before its keyframe", robot.ID, tie.ID, tie.FromRobot)
				}
				o, _ := robotNumber(tie.ToRobot)
				for _, k := range w.Survey.Robots[o].Keyframes {
					if k.Session == tie.ToSession && k.ID == tie.ToKey && k.StampNS > e.AtNS {
						return fmt.Errorf("tie %s sees a keyframe of the future", tie.ID)
					}
				}
			}
		}
		if n := once(keys); n >= 0 {
			return fmt.Errorf("%s: keyframe %d is delivered %d times", robot.ID, n, keys[n])
		}
		if n := once(rels); n >= 0 {
			return fmt.Errorf("%s: relative %d is delivered %d times", robot.ID, n, rels[n])
		}
	}
	if n := once(ties); n >= 0 {
		return fmt.Errorf("tie %d is delivered %d times", n, ties[n])
	}
	return nil
}

func once(counts []int) int {
	for i, n := range counts {
		if n != 1 {
			return i
		}
	}
	return -1
}

func TestAnyScenario(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		sc := Default()
		sc.Site.Kind = rapid.SampledFrom([]string{"mine", "store", "wood"}).Draw(t, "kind")
		sc.Fleet.Robots = rapid.IntRange(1, 9).Draw(t, "robots")
		sc.Duration = rapid.Float64Range(30, 600).Draw(t, "duration")
		sc.Fleet.StartSpread = sc.Duration * rapid.Float64Range(0, 0.5).Draw(t, "spread")
		sc.Fleet.KeyframeSpacing = rapid.Float64Range(0.25, 5).Draw(t, "spacing")
		sc.Fleet.SpeedMax = rapid.Float64Range(0.5, 5).Draw(t, "speed")
		sc.Site.Mine.Levels = rapid.IntRange(1, 5).Draw(t, "levels")
		sc.Site.Mine.Drifts = rapid.IntRange(0, 6).Draw(t, "drifts")
		sc.Site.Mine.CrossCuts = rapid.SampledFrom([]int{0, 2, 3, 6}).Draw(t, "cross-cuts")
		sc.Site.Store.Aisles = rapid.IntRange(0, 9).Draw(t, "aisles")
		sc.Site.Store.Blocks = rapid.IntRange(0, 3).Draw(t, "blocks")
		sc.Site.Wood.Clearings = rapid.SampledFrom([]int{0, 4, 5, 30}).Draw(t, "clearings")
		sc.Ties.RevisitRange = rapid.Float64Range(0, 20).Draw(t, "revisit")
		sc.FrontEnd.ClosureRange = rapid.Float64Range(0, 20).Draw(t, "closure")
		sc.FrontEnd.FalseClosures = rapid.Float64Range(0, 0.5).Draw(t, "false closures")
		sc.FalseTies.Independent = rapid.Float64Range(0, 0.4).Draw(t, "independent")
		sc.FalseTies.Clustered = rapid.Float64Range(0, 0.4).Draw(t, "clustered")
		for range rapid.IntRange(0, 3).Draw(t, "restarts") {
			at := rapid.Float64Range(0, sc.Duration).Draw(t, "restart")
			sc.FrontEnd.Restarts = append(sc.FrontEnd.Restarts, RestartSpec{rapid.SampledFrom([]string{allRobots, "r01"}).Draw(t, "robot"), at})
		}
		seed := rapid.Uint64().Draw(t, "seed")
		w, err := Simulate(sc, seed)
		if errors.Is(err, errCramped) {
			return
		}
		if err != nil {
			t.Fatal(err)
		}
		if err := soundFeed(w); err != nil {
			t.Fatal(err)
		}
		wrong := 0
		for _, ok := range w.TieTrue {
			if !ok {
				wrong++
			}
		}
		if want := int(math.Round((sc.FalseTies.Independent + sc.FalseTies.Clustered) * float64(len(w.TieTrue)))); wrong != want {
			t.Fatalf("%d of %d ties are false, want %d", wrong, len(w.TieTrue), want)
		}
		s := newSite(sc, seed)
		for r := range w.tracks {
			for k := range w.tracks[r].pose {
				if c := s.clearance(w.tracks[r].pose[k].T); c < 0 {
					t.Fatalf("robot %d is %.2f m in the wall at keyframe %d", r, -c, k)
				}
			}
		}
	})
}

func TestFeeds(t *testing.T) {
	for _, name := range BuiltinNames() {
		_, w := world(t, name, 9, nil)
		if err := soundFeed(w); err != nil {
			t.Errorf("%s: %v", name, err)
		}
	}
}

func BenchmarkSimulate(b *testing.B) {
	for _, robots := range []int{6, 30} {
		b.Run(fmt.Sprintf("mine-%d", robots), func(b *testing.B) {
			for b.Loop() {
				world(b, "mine", 1, func(sc *Scenario) { sc.Fleet.Robots = robots })
			}
		})
	}
}
