package scenarios

import (
	"context"
	"os"
	"path/filepath"
	"testing"
	"time"

	"go.uber.org/goleak"

	"selvage/internal/survey"
)

// publishedSets are the recorded sets that are split into pieces.
var publishedSets = []string{
	"small-grid", "mit-killian", "csail", "intel", "intel-1228", "manhattan3500", "manhattan3500-info", "city10000", "sphere2500",
	"sphere-dense", "parking-garage", "cubicle-block", "generated-cube-1728",
}

// onBus splits a recorded set into k pieces, lets them find each other on the bus, and compares with the adjustment in one piece.
func onBus(t *testing.T, whole *survey.Survey, k int) {
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
	t.Logf("%s | %d | %d rounds | gap %.1e | %.2f s | largest summary %d | up %d down %d", whole.Meta.Name, k, r.Rounds, g.Relative(), took.Seconds(), largest, up, down)
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
	goleak.VerifyNone(t)
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
			if whole.Meta.Name == "" {
				whole.Meta.Name = set
			}
			pieces := []int{2, 4, 8, 16}
			if !long {
				pieces = []int{short[set]}
			}
			for _, k := range pieces {
				onBus(t, whole, k)
			}
		})
	}
}

func TestOnBusStopsWhenItIsTold(t *testing.T) {
	defer goleak.VerifyNone(t)
	sc, w := world(t, "mine", 1, nil)
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	r, err := OnBus(ctx, w.Outing(sc, 1), Settings{})
	if err != nil {
		t.Fatal(err)
	}
	if !r.Interrupted || r.Settled || len(r.Samples) == 0 {
		t.Errorf("interrupted %v, settled %v, %d samples", r.Interrupted, r.Settled, len(r.Samples))
	}
}
