package scenarios

import (
	"context"
	"errors"
	"testing"
	"time"
)

// TestClosuresJudged gives every front end a share of false loop closures and demands that the agents refuse at least 95 % of them and at
// most 2 % of the true ones, and that the fleet joins and holds no false tie as without them. With SELVAGE_LONG=1 ten seeds a scenario (SELVAGE_SEEDS: that many),
// each run without false closures as well; otherwise one, of which it is known that all robots join.
func TestClosuresJudged(t *testing.T) {
	seeds := seedsOf(t, 1, 10)
	long := seeds > 1
	for _, name := range BuiltinNames() {
		t.Run(name, func(t *testing.T) {
			var right, wrong Verdicts
			for seed := uint64(1); seed <= seeds; seed++ {
				run := func(share float64) *Score {
					sc, err := Builtin(name)
					if err != nil {
						t.Fatal(err)
					}
					sc.FrontEnd.FalseClosures = share
					w, err := Simulate(sc, seed)
					if err != nil {
						t.Fatal(err)
					}
					began := time.Now()
					r, err := Virtual(context.Background(), w.Outing(sc, seed), Settings{})
					if err != nil {
						t.Fatal(err)
					}
					spent := time.Since(began)
					s, err := r.Score()
					if err != nil {
						t.Fatal(err)
					}
					t.Logf("seed %d, share %g: %v, gap %v, joined %d, closures true %+v false %+v, ties true %+v false %+v", seed, share, spent,
						*s.GapRelative, robotsJoined(s), *s.Closures.True, *s.Closures.False, *s.Ties.True, *s.Ties.False)
					return s
				}
				s := run(0.05)
				want := len(s.Robots)
				if long {
					want = robotsJoined(run(0))
				}
				right.sum(s.Closures.True)
				wrong.sum(s.Closures.False)
				if robotsJoined(s) != want {
					t.Errorf("seed %d: %d robots joined, %d without false closures", seed, robotsJoined(s), want)
				}
				for i := range s.Acceptance {
					if c := &s.Acceptance[i]; !c.OK {
						t.Errorf("seed %d: not accepted: %s, %v", seed, c.Rule, *c.Value)
					}
				}
			}
			if n := wrong.Held + wrong.Refused + wrong.Open; n == 0 || 100*wrong.Refused < 95*n {
				t.Errorf("of the false closures %+v: refused less than 95 %%", wrong)
			}
			if n := right.Held + right.Refused + right.Open; 100*right.Refused > 2*n {
				t.Errorf("of the true closures %+v: refused more than 2 %%", right)
			}
		})
	}
}

// TestFaultsHealDespiteFalseClosures runs fault schedules in which a fifth of many loop closures is false.
func TestFaultsHealDespiteFalseClosures(t *testing.T) {
	refused := 0
	for seed := uint64(1); seed <= 12; seed++ {
		sc := smallFleet(seed)
		sc.FrontEnd.FalseClosures, sc.FrontEnd.ClosureSpacing = 0.2, 2
		w, err := Simulate(sc, seed)
		if errors.Is(err, errCramped) {
			continue
		}
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
		var s Score
		s.Robots = make([]RobotScore, len(r.Agents))
		r.countClosures(&s)
		if s.Closures.False.Held > 0 {
			t.Errorf("seed %d: false closures are held: %+v", seed, *s.Closures.False)
		}
		refused += s.Closures.False.Refused
	}
	if refused == 0 {
		t.Error("no false closure was there to be refused")
	}
}

func robotsJoined(s *Score) (n int) {
	for i := range s.Robots {
		if s.Robots[i].Joined {
			n++
		}
	}
	return n
}

func (v *Verdicts) sum(w *Verdicts) {
	v.Held += w.Held
	v.Refused += w.Refused
	v.Open += w.Open
	v.Unheard += w.Unheard
}
