package scenarios

import (
	"context"
	"math"
	"testing"

	"selvage/internal/audit"
)

// What the coordinator says of the ties it holds, from condensed graphs of single precision, is what the audit of all raw measurements
// finds.
func TestLiveFiguresAreThoseOfTheAudit(t *testing.T) {
	r := shortRun(t, nil)
	live := r.figures()
	a, err := audit.Run(context.Background(), audit.Input{Survey: r.Outing.Survey, Verdicts: r.Verdicts(), Decided: "the run"})
	if err != nil {
		t.Fatal(err)
	}
	held, checked := 0, 0
	for i := range a.Ties {
		x := &a.Ties[i]
		if x.Verdict != "held" {
			continue
		}
		held++
		f, known := live[x.ID]
		if !known {
			t.Errorf("%s: the coordinator says nothing", x.ID)
			continue
		}
		if f.Bridge != x.Bridge {
			t.Errorf("%s: bridge %v, audit %v", x.ID, f.Bridge, x.Bridge)
		}
		if x.Bridge {
			continue
		}
		checked++
		for _, c := range []struct {
			name      string
			got, want float64
		}{{"redundancy", f.Redundancy, *x.Redundancy}, {"statistic", f.Statistic, *x.T}, {"detectable m", f.DetectableM, *x.DetectableM}, {"detectable rad", f.DetectableRad, *x.DetectableRad}} {
			if !(math.Abs(c.got-c.want) <= 1e-4*math.Abs(c.want)+1e-6) {
				t.Errorf("%s: %s %v, audit %v", x.ID, c.name, c.got, c.want)
			}
		}
	}
	if checked < 3 || len(live) != held {
		t.Errorf("%d of %d held ties checked, the coordinator has %d", checked, held, len(live))
	}
}
