package scenarios

import (
	"context"
	"fmt"
	"os"
	"slices"
	"strconv"
	"testing"

	"selvage/internal/audit"
	"selvage/internal/survey"
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
	wrong         []string // false ties that are held
	flagged       int      // of them, by the audit
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
			if k == 0 {
				f.wrong = append(f.wrong, tie.ID)
			}
		}
	}
	if len(f.wrong) > 0 {
		f.flagged = flagged(t, r, f.wrong)
	}
	for i, a := range r.Agents {
		f.largest = max(f.largest, float64(r.Traffic[i].LargestSummary)/float64(a.Raw()))
		f.up = max(f.up, float64(r.Traffic[i].Up)/float64(a.Raw()))
	}
	return f
}

// flagged counts those of the given ties that an audit of the run shows to a person: held, but failed, checked by nothing, at the
// single place that joins two parts of the fleet, or not to be told apart from others.
func flagged(t testing.TB, r *Run, ties []string) (n int) {
	t.Helper()
	s := *r.Outing.Survey
	s.Robots = slices.Clone(s.Robots)
	closures := r.Closures()
	for i := range s.Robots {
		var kept []survey.Relative
		for _, m := range s.Robots[i].Relatives {
			if m.Kind == survey.Closure {
				held := closures[0].Verdict == "held"
				closures = closures[1:]
				if !held {
					continue
				}
			}
			kept = append(kept, m)
		}
		s.Robots[i].Relatives = kept
	}
	a, err := audit.Run(context.Background(), audit.Input{Survey: &s, Verdicts: r.Verdicts(), Decided: "the coordinator"})
	if err != nil {
		t.Fatal(err)
	}
	for i := range a.Ties {
		x := &a.Ties[i]
		if slices.Contains(ties, x.ID) {
			t.Logf("tie %s: %s, bridge %v, single place %v, set %d", x.ID, x.Status, x.Bridge, x.Place, x.Set)
			if x.Status != audit.Passed || x.Bridge || x.Place || x.Set > 0 && len(a.Sets[x.Set-1].Ties) > 1 {
				n++
			}
		}
	}
	return n
}

// seedsOf is how many seeds a test of figures runs: few, with SELVAGE_LONG=1 as many as its figure asks for, with SELVAGE_SEEDS that many.
func seedsOf(t *testing.T, few, long uint64) uint64 {
	t.Helper()
	if text := os.Getenv("SELVAGE_SEEDS"); text != "" {
		n, err := strconv.ParseUint(text, 10, 32)
		if err != nil || n == 0 {
			t.Fatalf("SELVAGE_SEEDS=%s: expected a number of seeds", text)
		}
		return n
	}
	if os.Getenv("SELVAGE_LONG") == "1" {
		return long
	}
	return few
}

// TestFleetFigures runs the built-in scenarios with false ties of each kind and holds the fleet to what it must reach: no false
// tie held, robots joined, true ties held, bytes, and the one-piece solution. With six in ten ties false only the one-piece solution
// is demanded, and that a false tie which is held stands out in the audit. SELVAGE_LONG=1 runs forty seeds of each, some hours of
// processor time; without it one seed of few. -run TestFleetFigures/mine/0.6 runs a part.
func TestFleetFigures(t *testing.T) {
	seeds := seedsOf(t, 1, 40)
	for _, name := range BuiltinNames() {
		for _, c := range []struct {
			independent, clustered, joined, held float64
		}{{0, 0, 5.5, 0.85}, {0.1, 0, 5.5, 0.85}, {0.3, 0, 5, 0.85}, {0.6, 0, 0, 0}, {0, 0.1, 5.5, 0.85}, {0, 0.3, 5, 0.85}} {
			if seeds == 1 && c.independent != 0.1 {
				continue
			}
			t.Run(fmt.Sprintf("%s/%g+%g", name, c.independent, c.clustered), func(t *testing.T) {
				joined, held, offered, flagged := 0, [2]int{}, [2]int{}, 0
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
					flagged += f.flagged
					worst.gap, worst.largest, worst.up = max(worst.gap, f.gap), max(worst.largest, f.largest), max(worst.up, f.up)
					worst.rounds = max(worst.rounds, f.rounds)
					if f.held[0] > 0 {
						t.Logf("seed %d: %d false ties are held, %d of them flagged: %v", seed, f.held[0], f.flagged, f.wrong)
					}
					if f.held[0] > 0 && c.joined > 0 || f.held[0] != f.flagged {
						t.Errorf("seed %d: %d false ties are held, the audit flags %d", seed, f.held[0], f.flagged)
					}
					if !(f.gap <= 1e-9) || !f.settled {
						t.Errorf("seed %d: gap %.3g, settled %v", seed, f.gap, f.settled)
					}
				}
				mean, recall := float64(joined)/float64(seeds), float64(held[1])/float64(offered[1])
				t.Logf("%d seeds: joined %.2f, true ties held %.4f of %d, false held %d of %d (%d flagged by the audit), worst: gap %.2g, rounds %d, largest summary %.3f, bytes up %.3f of raw",
					seeds, mean, recall, offered[1], held[0], offered[0], flagged, worst.gap, worst.rounds, worst.largest, worst.up)
				if mean < c.joined || recall < c.held {
					t.Errorf("joined %.2f on average, true ties held %.4f", mean, recall)
				}
				if c.joined > 0 && (worst.largest > 0.10 || worst.up > 1) {
					t.Errorf("largest summary %.3f and bytes up %.3f of the raw graph", worst.largest, worst.up)
				}
			})
		}
	}
}

// TestThirtyRobots: a fleet of thirty with three in ten of its ties false, each by itself or in clusters. SELVAGE_LONG=1 runs it.
func TestThirtyRobots(t *testing.T) {
	seeds := seedsOf(t, 0, 10)
	if seeds == 0 {
		t.Skip("takes hours: SELVAGE_LONG=1 runs it")
	}
	for _, c := range []struct{ independent, clustered float64 }{{0.3, 0}, {0, 0.3}} {
		t.Run(fmt.Sprintf("%g+%g", c.independent, c.clustered), func(t *testing.T) {
			for seed := uint64(1); seed <= seeds; seed++ {
				sc, err := Builtin("mine")
				if err != nil {
					t.Fatal(err)
				}
				sc.Fleet.Robots, sc.FalseTies.Independent, sc.FalseTies.Clustered = 30, c.independent, c.clustered
				f := rehearse(t, sc, seed)
				t.Logf("seed %d: joined %d, true held %d of %d, false %d of %d, gap %.2g, rounds %d", seed, f.joined, f.held[1], f.offered[1], f.held[0], f.offered[0], f.gap, f.rounds)
				if f.held[0] > 0 || !(f.gap <= 1e-9) {
					t.Errorf("seed %d: %d false ties held (%v), gap %.3g", seed, f.held[0], f.wrong, f.gap)
				}
			}
		})
	}
}
