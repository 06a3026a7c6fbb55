package scenarios

import (
	"context"
	"fmt"
	"os"
	"testing"

	"selvage/msgs"
)

// figures are what one rehearsal came to.
type figures struct {
	joined        int
	held, offered [2]int // ties, false and true
	gap           float64
	largest, up   float64 // shares of the raw graph: the largest summary of a robot, everything a robot sent
	rounds        int
	settled       bool
}

func rehearse(t testing.TB, sc *Scenario, seed uint64) figures {
	t.Helper()
	w, err := Simulate(sc, seed)
	if err != nil {
		t.Fatal(err)
	}
	r, err := Virtual(context.Background(), w.Outing(sc, seed), Settings{})
	if err != nil {
		t.Fatal(err)
	}
	gaps, err := r.gaps()
	if err != nil {
		t.Fatal(err)
	}
	f := figures{joined: r.Samples[len(r.Samples)-1].Joined, rounds: r.Rounds, settled: r.Settled}
	for _, g := range gaps {
		f.gap = max(f.gap, g.Relative())
	}
	verdict := map[string]msgs.VerdictKind{}
	for _, v := range r.Coordinator.Findings() {
		verdict[v.Tie] = v.Verdict
	}
	for i, tie := range w.Survey.Ties {
		k := 0
		if w.TieTrue[i] {
			k = 1
		}
		f.offered[k]++
		if verdict[tie.ID] == msgs.Held {
			f.held[k]++
		}
	}
	for i, a := range r.Agents {
		f.largest = max(f.largest, float64(r.Traffic[i].LargestSummary)/float64(a.Raw()))
		f.up = max(f.up, float64(r.Traffic[i].Up)/float64(a.Raw()))
	}
	return f
}

// TestFleetFigures runs the built-in scenarios with false ties of each kind and holds the fleet to what it must reach: no false
// tie held, robots joined, true ties held, bytes, and the one-piece solution. It takes the better part of an hour; SELVAGE_LONG=1
// runs it, without it one seed of each.
func TestFleetFigures(t *testing.T) {
	seeds := uint64(1)
	if os.Getenv("SELVAGE_LONG") == "1" {
		seeds = 20
	}
	only := os.Getenv("SELVAGE_SCENARIO")
	for _, name := range BuiltinNames() {
		for _, c := range []struct {
			independent, clustered, joined float64
		}{{0, 0, 5.5}, {0.1, 0, 5.5}, {0.3, 0, 5}, {0, 0.1, 5.5}} {
			if only != "" && only != name || seeds == 1 && c.independent != 0.1 {
				continue
			}
			t.Run(fmt.Sprintf("%s/%g+%g", name, c.independent, c.clustered), func(t *testing.T) {
				joined, held, offered := 0, [2]int{}, [2]int{}
				worst := figures{}
				for seed := uint64(1); seed <= seeds; seed++ {
					sc, err := Builtin(name)
					if err != nil {
						t.Fatal(err)
					}
					sc.FalseTies.Independent, sc.FalseTies.Clustered = c.independent, c.clustered
					f := rehearse(t, sc, seed)
					joined += f.joined
					for k := range held {
						held[k] += f.held[k]
						offered[k] += f.offered[k]
					}
					worst.gap, worst.largest, worst.up = max(worst.gap, f.gap), max(worst.largest, f.largest), max(worst.up, f.up)
					worst.rounds = max(worst.rounds, f.rounds)
					if f.held[0] > 0 {
						t.Errorf("seed %d: %d false ties are held", seed, f.held[0])
					}
					if !(f.gap <= 1e-9) || !f.settled {
						t.Errorf("seed %d: gap %.3g, settled %v", seed, f.gap, f.settled)
					}
				}
				mean, recall := float64(joined)/float64(seeds), float64(held[1])/float64(offered[1])
				t.Logf("%d seeds: joined %.2f, true ties held %.4f of %d, false held %d of %d, worst: gap %.2g, rounds %d, largest summary %.3f, bytes up %.3f of raw",
					seeds, mean, recall, offered[1], held[0], offered[0], worst.gap, worst.rounds, worst.largest, worst.up)
				if mean < c.joined || recall < 0.85 {
					t.Errorf("joined %.2f on average, true ties held %.4f", mean, recall)
				}
				if worst.largest > 0.10 || worst.up > 1 {
					t.Errorf("largest summary %.3f and bytes up %.3f of the raw graph", worst.largest, worst.up)
				}
			})
		}
	}
}

// TestThirtyRobots: a fleet of thirty with a third of its ties false. SELVAGE_LONG=1 runs it.
func TestThirtyRobots(t *testing.T) {
	if os.Getenv("SELVAGE_LONG") != "1" {
		t.Skip("takes a quarter of an hour: SELVAGE_LONG=1 runs it")
	}
	for seed := uint64(1); seed <= 5; seed++ {
		sc, err := Builtin("mine")
		if err != nil {
			t.Fatal(err)
		}
		sc.Fleet.Robots, sc.FalseTies.Independent, sc.FalseTies.Clustered = 30, 0.3, 0
		f := rehearse(t, sc, seed)
		t.Logf("seed %d: joined %d, true held %d of %d, false %d of %d, gap %.2g, rounds %d", seed, f.joined, f.held[1], f.offered[1], f.held[0], f.offered[0], f.gap, f.rounds)
		if f.held[0] > 0 || !(f.gap <= 1e-9) {
			t.Errorf("seed %d: %d false ties held, gap %.3g", seed, f.held[0], f.gap)
		}
	}
}
