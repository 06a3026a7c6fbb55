package scenarios

import (
	"context"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"go.uber.org/goleak"

	"selvage/internal/survey"
	"selvage/msgs"
)

// publishedSets are the recorded sets that are split into pieces.
var publishedSets = []string{
	"small-grid", "mit-killian", "csail", "intel", "intel-1228", "manhattan3500", "manhattan3500-info", "city10000", "sphere2500",
	"sphere-dense", "parking-garage", "cubicle-block", "generated-cube-1728",
}

// onBus splits a recorded set of a name into k pieces, lets them find each other on the bus, and compares with the adjustment in one piece.
func onBus(t *testing.T, set string, whole *survey.Survey, k int) {
	t.Helper()
	s, _, err := SplitSurvey(whole, k, 1)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Minute)
	defer cancel()
	begin := time.Now()
	r, err := OnBus(ctx, Recorded(s), Settings{HoldAll: true})
	if err != nil {
		t.Fatal(err)
	}
	took := time.Since(begin)
	gaps, err := r.gaps()
	if err != nil {
		t.Fatal(err)
	}
	if !r.Settled || len(r.Refusals) > 0 {
		t.Errorf("settled %v, warnings %v", r.Settled, r.Refusals)
	}
	if len(gaps) != 1 || len(gaps[0].Robots) != k {
		t.Fatalf("the pieces are in islands %+v", gaps)
	}
	largest, up, down := 0, 0, 0
	for i := range r.Traffic {
		largest = max(largest, r.Traffic[i].LargestSummary)
		up += r.Traffic[i].Up
		down += r.Traffic[i].Down
	}
	g := &gaps[0]
	t.Logf("%s | %d | %d rounds | gap %.1e | %.2f s | largest summary %d | up %d down %d", set, k, r.Rounds, g.Relative(), took.Seconds(), largest, up, down)
	if !(g.Relative() <= 1e-9) {
		t.Errorf("gap %.3g: F %.12g, in one piece %.12g", g.Relative(), g.Fleet, g.Whole)
	}
	if largest == 0 || down == 0 || len(r.Samples) < 2 || r.Rounds < 1 {
		t.Errorf("largest summary %d, heard %d, %d samples, %d rounds", largest, down, len(r.Samples), r.Rounds)
	}
	last := r.Samples[len(r.Samples)-1]
	if last.Joined != k || r.Samples[0].Joined != 0 {
		t.Errorf("joined at first %d, at last %d", r.Samples[0].Joined, last.Joined)
	}
}

// TestPiecesOnBus takes a few of the published sets, and all of them when SELVAGE_LONG is set.
func TestPiecesOnBus(t *testing.T) {
	defer goleak.VerifyNone(t)
	short := map[string]int{"small-grid": 16, "mit-killian": 4, "intel": 8, "parking-garage": 4, "sphere2500": 16}
	for _, set := range publishedSets {
		t.Run(set, func(t *testing.T) {
			long := os.Getenv("SELVAGE_LONG") != ""
			if !long && short[set] == 0 {
				t.Skip("SELVAGE_LONG is not set")
			}
			whole, err := survey.ReadPoseTables(filepath.Join(shared(t), "datasets", set))
			if err != nil {
				t.Fatal(err)
			}
			pieces := []int{2, 4, 8, 16}
			if !long {
				pieces = []int{short[set]}
			}
			for _, k := range pieces {
				onBus(t, set, whole, k)
			}
		})
	}
}

// TestSmallFleetOnBus lets a fleet decide on its ties itself, and compares with the same outing on the virtual clock.
func TestSmallFleetOnBus(t *testing.T) {
	defer goleak.VerifyNone(t)
	sc := smallFleet(1)
	w, err := Simulate(sc, 1)
	if err != nil {
		t.Fatal(err)
	}
	o := w.Outing(sc, 1)
	told := 0
	r, err := OnBus(context.Background(), o, Settings{Progress: func(p Progress) { told++ }})
	if err != nil {
		t.Fatal(err)
	}
	checkHealed(t, r)
	if len(r.Refusals) > 0 {
		t.Errorf("warnings %v", r.Refusals)
	}
	if told != len(r.Samples) || told < 2 {
		t.Errorf("told %d times of progress, %d samples", told, len(r.Samples))
	}
	v, err := Virtual(context.Background(), &Outing{Survey: o.Survey, Feed: o.Feed, EndNS: o.EndNS, TieTrue: o.TieTrue}, Settings{})
	if err != nil {
		t.Fatal(err)
	}
	verdicts := map[string]msgs.VerdictKind{}
	for _, f := range v.Coordinator.Findings() {
		verdicts[f.Tie] = f.Verdict
	}
	for _, f := range r.Coordinator.Findings() {
		if verdicts[f.Tie] != f.Verdict {
			t.Errorf("tie %s is %v on the bus and %v on the virtual clock", f.Tie, f.Verdict, verdicts[f.Tie])
		}
	}
	a, b := r.Samples[len(r.Samples)-1].ErrorM, v.Samples[len(v.Samples)-1].ErrorM
	if !(math.Abs(a-b) <= 1e-6*b) { // a micrometre in a metre
		t.Errorf("error %.9g m on the bus, %.9g m on the virtual clock", a, b)
	}
}

func TestOnBusStopsWhenItIsTold(t *testing.T) {
	defer goleak.VerifyNone(t)
	sc := smallFleet(2)
	w, err := Simulate(sc, 2)
	if err != nil {
		t.Fatal(err)
	}
	for _, samples := range []int{0, 1} { // before it began, in the midst of it
		ctx, cancel := context.WithCancel(context.Background())
		if samples == 0 {
			cancel()
		}
		r, err := OnBus(ctx, w.Outing(sc, 2), Settings{Progress: func(Progress) { cancel() }})
		cancel()
		if err != nil {
			t.Fatal(err)
		}
		if !r.Interrupted || r.Settled || len(r.Samples) != 2 || len(r.Agents) != 3 {
			t.Errorf("interrupted %v, settled %v, %d samples, %d agents", r.Interrupted, r.Settled, len(r.Samples), len(r.Agents))
		}
	}
}

// TestOnBusTellsWhatAnAgentRefuses breaks the outing.
func TestOnBusTellsWhatAnAgentRefuses(t *testing.T) {
	defer goleak.VerifyNone(t)
	sc := smallFleet(3)
	w, err := Simulate(sc, 3)
	if err != nil {
		t.Fatal(err)
	}
	o := w.Outing(sc, 3)
	o.Feed[1] = append([]Event{o.Feed[1][0]}, o.Feed[1]...)
	if _, err := OnBus(context.Background(), o, Settings{}); err == nil || !strings.Contains(err.Error(), "robot "+o.Survey.Robots[1].ID+": keyframe") {
		t.Errorf("a keyframe that comes twice: %v", err)
	}
	o.Survey.Robots[2].ID = "no name"
	if _, err := OnBus(context.Background(), o, Settings{}); err == nil || !strings.Contains(err.Error(), "no name") {
		t.Errorf("a name that the bus cannot carry: %v", err)
	}
}
