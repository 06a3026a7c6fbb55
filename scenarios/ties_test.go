package scenarios

import (
	"math"
	"testing"
)

func TestTrueTiesAreSeen(t *testing.T) {
	for _, name := range BuiltinNames() {
		sc, w := world(t, name, 3, nil)
		s := newSite(sc, 3)
		ends := map[[2]int][]float64{} // travel of the first robot at its ties with the second
		for i, tie := range w.Survey.Ties {
			if !w.TieTrue[i] {
				continue
			}
			a, _ := robotNumber(tie.FromRobot)
			b, _ := robotNumber(tie.ToRobot)
			x, y := &w.tracks[a], &w.tracks[b]
			p, q := x.pose[tie.FromKey].T, y.pose[tie.ToKey].T
			apart := float64(x.atNS[tie.FromKey]-y.atNS[tie.ToKey]) / 1e9
			reach := sc.Ties.RevisitRange
			switch tie.Source {
			case "encounter":
				reach = sc.Ties.EncounterRange
				if most := 1.1 * sc.Fleet.KeyframeSpacing / sc.Fleet.SpeedMin; apart < 0 || apart > most {
					t.Errorf("%s: %s is an encounter of moments %.1f s apart, want at most %.1f", name, tie.ID, apart, most)
				}
			default:
				if apart < 20 {
					t.Errorf("%s: %s recognises a place after %.1f s", name, tie.ID, apart)
				}
			}
			if d := distance(p, q); d > reach {
				t.Errorf("%s: %s spans %.1f m, want at most %g", name, tie.ID, d, reach)
			}
			if !s.sees(p, q) {
				t.Errorf("%s: %s passes a wall", name, tie.ID)
			}
			ends[[2]int{a, b}] = append(ends[[2]int{a, b}], x.travel[tie.FromKey])
			ends[[2]int{b, a}] = append(ends[[2]int{b, a}], y.travel[tie.ToKey])
		}
		for pair, at := range ends {
			for i := range at {
				for k := range i {
					if math.Abs(at[i]-at[k]) < sc.Ties.Spacing {
						t.Errorf("%s: robots %v have ties %.1f m apart", name, pair, math.Abs(at[i]-at[k]))
					}
				}
			}
		}
	}
}

func TestWallsHide(t *testing.T) {
	sc, err := Builtin("store")
	if err != nil {
		t.Fatal(err)
	}
	s := newSite(sc, 1) // aisles 4 m apart along y, cross aisles at 0, 40 and 80 m
	for _, c := range []struct {
		p, q  [3]float64
		sight bool
	}{
		{[3]float64{8, 10, 0}, [3]float64{8, 30, 0}, true},
		{[3]float64{8, 10, 0}, [3]float64{12, 10, 0}, false},
		{[3]float64{8, 40, 0}, [3]float64{20, 40, 0}, true},
		{[3]float64{8, 36, 0}, [3]float64{12, 36, 0}, false},
		{[3]float64{7, 10, 0}, [3]float64{9, 30, 0}, true},
		{[3]float64{8, 20, 0}, [3]float64{8, 20, 0}, true},
	} {
		if got := s.sees(c.p, c.q); got != c.sight {
			t.Errorf("%v to %v: in sight %v", c.p, c.q, got)
		}
	}
	for _, c := range []struct {
		p    [3]float64
		want float64
	}{{[3]float64{8, 20, 0}, 1.3}, {[3]float64{9, 20.5, 0}, 0.3}, {[3]float64{10, 20, 0}, -0.7}} {
		if got := s.clearance(c.p); math.Abs(got-c.want) > 0.11 {
			t.Errorf("clearance at %v is %.2f, want %.2f", c.p, got, c.want)
		}
	}
	// A shaft through the levels of a mine is no line of sight.
	sc, err = Builtin("mine")
	if err != nil {
		t.Fatal(err)
	}
	s = newSite(sc, 1)
	p := s.nodes[s.entrance]
	if q := [3]float64{p[0], p[1], p[2] - sc.Site.Mine.LevelSpacing}; s.sees(p, q) {
		t.Error("the level below is in sight")
	}
}
