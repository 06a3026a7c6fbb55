package scenarios

import (
	"context"
	"fmt"
	"os"
	"strconv"
	"testing"

	"selvage/msgs"
)

// healing is a radio with faults during the outing and none afterwards.
type healing struct {
	*Radio
	endNS int64
}

func (h healing) Up(nowNS int64, a, b string) bool { return nowNS > h.endNS || h.Radio.Up(nowNS, a, b) }

func (h healing) Send(nowNS int64, from, to string, bytes int) []int64 {
	if nowNS > h.endNS {
		return []int64{nowNS + 1e6}
	}
	return h.Radio.Send(nowNS, from, to, bytes)
}

// faultySeeds is how many fault schedules the test runs: SELVAGE_SEEDS, 60 without it.
func faultySeeds() int {
	if n, err := strconv.Atoi(os.Getenv("SELVAGE_SEEDS")); err == nil {
		return n
	}
	return 60
}

// TestFaultsHeal runs a small fleet over a radio that loses, delays, doubles and reorders from a seed, with outages, and demands
// that after it heals every tie has arrived once, everything is answered, and the poses are those of the one-piece adjustment.
func TestFaultsHeal(t *testing.T) {
	for seed := uint64(1); seed <= uint64(faultySeeds()); seed++ {
		t.Run(fmt.Sprint(seed), func(t *testing.T) {
			t.Parallel()
			sc := smallFleet(seed)
			w, err := Simulate(sc, seed)
			if err != nil {
				t.Fatal(err)
			}
			o := w.Outing(sc, seed)
			o.Link = healing{NewRadio(sc, w, seed), w.EndNS}
			r, err := Virtual(context.Background(), o, Settings{})
			if err != nil {
				t.Fatal(err)
			}
			checkHealed(t, r)
		})
	}
}

// smallFleet is three robots for five minutes; what the radio does depends on the seed.
func smallFleet(seed uint64) *Scenario {
	sc := Default()
	sc.Name, sc.Duration = "small", 300
	sc.Fleet.Robots, sc.Fleet.StartSpread, sc.Fleet.Reach = 3, 40, 40
	sc.Site.Mine.Levels, sc.Site.Mine.Drifts, sc.Site.Mine.CrossCuts = 1, 2, 3
	sc.Ties.Spacing = 8
	rng := stream(seed, "faults of the test")
	sc.Radio.Range = 0
	sc.Radio.Loss = 0.6 * rng.Float64()
	sc.Radio.Delay, sc.Radio.Jitter = rng.Float64(), 10*rng.Float64()
	sc.Radio.Duplicates, sc.Radio.Reordered, sc.Radio.ReorderHold = 0.3*rng.Float64(), 0.3*rng.Float64(), 40*rng.Float64()
	from := 200 * rng.Float64()
	sc.Radio.Outages = []OutageSpec{{Robot: "all", From: from, To: from + 60*rng.Float64()}, {Robot: robotID(rng.IntN(3)), From: 100, To: 250}}
	return sc
}

func checkHealed(t *testing.T, r *Run) {
	t.Helper()
	if !r.Settled {
		t.Errorf("not settled at %d s", r.EndNS/1e9)
	}
	findings := r.Coordinator.Findings()
	known := map[string]msgs.VerdictKind{}
	for _, f := range findings {
		known[f.Tie] = f.Verdict
	}
	if len(findings) != len(r.Outing.Survey.Ties) || len(known) != len(findings) {
		t.Errorf("%d ties arrived, %d of them different, of %d", len(findings), len(known), len(r.Outing.Survey.Ties))
	}
	for i, tie := range r.Outing.Survey.Ties {
		if !r.Outing.TieTrue[i] && known[tie.ID] == msgs.Held {
			t.Errorf("false tie %s is held", tie.ID)
		}
	}
	placed := map[string]bool{}
	for _, p := range r.Coordinator.Map() {
		placed[p.Robot] = true
	}
	for i, a := range r.Agents { // a robot that no tie touches has no summary and gets no correction
		if id := r.Outing.Survey.Robots[i].ID; placed[id] && a.Applied() != r.Coordinator.Epoch() {
			t.Errorf("robot %s applied epoch %v of %v", id, a.Applied(), r.Coordinator.Epoch())
		}
	}
	if len(r.Refusals) > 0 {
		t.Errorf("sound messages were refused, the first: %s", r.Refusals[0])
	}
	gaps, err := r.gaps()
	if err != nil {
		t.Fatal(err)
	}
	for _, g := range gaps {
		if !(g.Relative() <= 1e-9) {
			t.Errorf("island of %v: F %.12g, in one piece %.12g, gap %.3g", g.Robots, g.Fleet, g.Whole, g.Relative())
		}
	}
}
