package scenarios

import (
	"context"
	"math"
	"os"
	"testing"

	"selvage/internal/audit"
	"selvage/internal/survey"
)

// Odometry whose errors are two and a half times as large as it says is found out: the estimates of the audit, averaged over robots and
// runs by their redundancy.
func TestUnderstatedOdometryIsFound(t *testing.T) {
	const real = 2.5
	names, seeds := []string{"store"}, uint64(2)
	if os.Getenv("SELVAGE_LONG") == "1" {
		names, seeds = BuiltinNames(), 6
	}
	for _, name := range names {
		variance, weight := 0.0, 0.0
		for seed := uint64(1); seed <= seeds; seed++ {
			_, w := world(t, name, seed, func(sc *Scenario) {
				sc.Duration, sc.Fleet.Robots, sc.FrontEnd.HeadingBias, sc.FrontEnd.OdometrySpread, sc.FalseTies = 1500, 4, 0, real, FalseTiesSpec{ClusterSize: 2, ClusterSpacing: 10}
			})
			in := audit.Input{Survey: w.Survey, Decided: "nobody"}
			for i := range w.Survey.Ties {
				in.Verdicts = append(in.Verdicts, survey.ResultVerdict{Tie: w.Survey.Ties[i].ID, Verdict: "held"})
			}
			a, err := audit.Run(context.Background(), in)
			if err != nil {
				t.Fatal(err)
			}
			for i := range a.Spread {
				if s := &a.Spread[i]; s.Ratio != nil && s.Class == "odometry" {
					variance += s.Redundancy * *s.Ratio * *s.Ratio
					weight += s.Redundancy
				}
			}
		}
		got := math.Sqrt(variance / weight)
		t.Logf("%s: odometry %.3f times the stated, redundancy %.0f", name, got, weight)
		if weight < 300 || math.Abs(got-real) > 0.1*real {
			t.Errorf("%s: odometry %.3f times the stated on a redundancy of %.0f, want %g within a tenth", name, got, weight, real)
		}
	}
}
