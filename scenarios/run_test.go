package scenarios

import (
	"context"
	"os"
	"path/filepath"
	"testing"
	"time"

	"selvage/internal/survey"
)

// shared is the folder with the published sets, which is not part of the project.
func shared(t testing.TB) string {
	dir := os.Getenv("SELVAGE_SHARED")
	if dir == "" {
		dir = filepath.Join("..", "..", "shared")
	}
	if _, err := os.Stat(dir); err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatalf("published sets: %v", err)
		}
		t.Skipf("published sets not here: %v", err)
	}
	return dir
}

func TestPieces(t *testing.T) {
	sets := []string{"small-grid", "mit-killian", "csail", "intel", "intel-1228", "manhattan3500", "manhattan3500-info"}
	if os.Getenv("SELVAGE_LONG") == "1" {
		sets = append(sets, "city10000", "sphere2500", "sphere-dense", "parking-garage", "cubicle-block", "generated-cube-1728")
	}
	for _, set := range sets {
		whole, err := survey.ReadPoseTables(filepath.Join(shared(t), "datasets", set))
		if err != nil {
			t.Fatal(err)
		}
		for _, k := range []int{2, 4, 8, 16} {
			s, q, err := SplitSurvey(whole, k, 1)
			if err != nil {
				t.Errorf("%s in %d: %v", set, k, err)
				continue
			}
			t0 := time.Now()
			r, err := Virtual(context.Background(), Recorded(s), Settings{HoldAll: true})
			if err != nil {
				t.Errorf("%s in %d: %v", set, k, err)
				continue
			}
			gaps, err := r.gaps()
			if err != nil {
				t.Fatal(err)
			}
			for _, g := range gaps {
				t.Logf("%s in %d: boundary %d, rounds %d, settled %v at %d s, F %.10g whole %.10g, gap %.3g (%v) refusals %v", set, k, q.Boundary, r.Rounds, r.Settled, r.EndNS/1e9, g.Fleet, g.Whole, g.Relative(), time.Since(t0), r.Refusals)
				if !(g.Relative() <= 1e-9) {
					t.Errorf("%s in %d: gap %.3g", set, k, g.Relative())
				}
			}
			if len(gaps) != 1 || len(gaps[0].Robots) != k {
				t.Errorf("%s in %d: islands %v", set, k, gaps)
			}
		}
	}
}
