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
// runs by their redundancy. What states its errors rightly is left in peace: the 95 % bounds of ties and closures, which nothing checks but
// that odometry, hold the truth as often as they say.
func TestUnderstatedOdometryIsFound(t *testing.T) {
	const real = 2.5
	names, seeds := []string{"store"}, uint64(2)
	if os.Getenv("SELVAGE_LONG") == "1" {
		names, seeds = BuiltinNames(), 6
	}
	inside, groups := 0, 0
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
				s := &a.Spread[i]
				if s.Ratio == nil {
					continue
				}
				if s.Class == "odometry" {
					variance += s.Redundancy * *s.Ratio * *s.Ratio
					weight += s.Redundancy
					continue
				}
				groups++
				if *s.Low <= 1 && 1 <= *s.High {
					inside++
				}
			}
		}
		got := math.Sqrt(variance / weight)
		t.Logf("%s: odometry %.3f times the stated, redundancy %.0f", name, got, weight)
		if weight < 300 || math.Abs(got-real) > 0.1*real {
			t.Errorf("%s: odometry %.3f times the stated on a redundancy of %.0f, want %g within a tenth", name, got, weight, real)
		}
	}
	n := float64(groups)
	t.Logf("%d of %d groups of ties and closures within their bounds", inside, groups)
	if least := 0.95*n - 3*math.Sqrt(n*0.95*0.05); groups < 6 || float64(inside) < least {
		t.Errorf("%d of %d groups of ties and closures within their bounds, want 95 %%, at three standard deviations at least %.0f", inside, groups, least)
	}
}
