package scenarios

import (
	"math"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/survey"
)

func TestFalseShares(t *testing.T) {
	for _, c := range []struct{ single, grouped float64 }{{0, 0}, {0.1, 0}, {0, 0.2}, {0.3, 0.3}, {0.6, 0}, {0, 0.6}, {0.45, 0.45}} {
		for _, name := range BuiltinNames() {
			sc, w := world(t, name, 4, func(sc *Scenario) { sc.FalseTies.Independent, sc.FalseTies.Clustered = c.single, c.grouped })
			wrong, grouped := 0, 0
			for i := range w.TieTrue {
				if !w.TieTrue[i] {
					wrong++
				}
				if w.Clustered[i] {
					grouped++
					if w.TieTrue[i] {
						t.Errorf("tie %d is true and in a cluster", i)
					}
				}
			}
			n := float64(len(w.TieTrue))
			if want := int(math.Round((c.single + c.grouped) * n)); wrong != want {
				t.Errorf("%s, %g and %g: %d of %g ties are false, want %d", name, c.single, c.grouped, wrong, n, want)
			}
			if math.Abs(float64(grouped)-c.grouped*n) > 1 {
				t.Errorf("%s, %g and %g: %d of %g ties are in clusters of %d", name, c.single, c.grouped, grouped, n, sc.FalseTies.ClusterSize)
			}
		}
	}
}

func TestFalseClosures(t *testing.T) {
	_, w := world(t, "mine", 4, func(sc *Scenario) { sc.FrontEnd.FalseClosures = 0.25 })
	for r, robot := range w.Survey.Robots {
		wrong, all := 0, 0
		for _, m := range robot.Relatives {
			if m.Kind == survey.Closure {
				all++
				if chi2(t, &w.tracks[r].pose[m.From], &w.tracks[r].pose[m.To], m.Pose, m.Cov, 3) > 100 {
					wrong++
				}
			}
		}
		if want := int(math.Round(0.25 * float64(all))); wrong != want || wrong == 0 {
			t.Errorf("%s: %d of %d closures are false, want %d", robot.ID, wrong, all, want)
		}
	}
}

// Each tie of a cluster agrees with others of the same pair on one wrong motion; in the store that is a shift by whole aisles.
func TestClustersAgree(t *testing.T) {
	for _, name := range BuiltinNames() {
		sc, w := world(t, name, 6, nil)
		clusters := map[string][]lie.SE3{}
		for i, tie := range w.Survey.Ties {
			if !w.Clustered[i] {
				continue
			}
			a, _ := robotNumber(tie.FromRobot)
			b, _ := robotNumber(tie.ToRobot)
			x, y := &w.tracks[a].pose[tie.FromKey], &w.tracks[b].pose[tie.ToKey]
			g := x.Mul(lie.FromQuat(tie.Pose.T, tie.Pose.Q)).Mul(y.Inv()) // carries the track of b to where the tie sees it
			pair := tie.FromRobot + tie.ToRobot
			if tie.FromRobot > tie.ToRobot {
				g, pair = g.Inv(), tie.ToRobot+tie.FromRobot
			}
			clusters[pair] = append(clusters[pair], g)
		}
		alone := 0
		for pair, gs := range clusters {
			for i, g := range gs {
				allies := 0
				for k, h := range gs {
					e := g.Between(h)
					xi := e.Log()
					if turn := math.Hypot(xi[3], math.Hypot(xi[4], xi[5])); k != i && turn < 0.08 {
						// The motions turn about the datum: compare where they put the site, not its origin.
						mid := [3]float64{100, 50, 0}
						if distance(g.Apply(mid), h.Apply(mid)) < 12 {
							allies++
						}
					}
				}
				if allies == 0 {
					alone++
				}
				if name == "store" {
					n := g.Apply([3]float64{60, 40, 0})[0] - 60
					if off := math.Abs(n/4 - math.Round(n/4)); off > 0.45 || math.Abs(n) < 2 {
						t.Errorf("store %s: a cluster is off by %.2f m", pair, n)
					}
				}
			}
		}
		if len(clusters) == 0 || alone > 1 { // the last cluster may be cut to a single tie
			t.Errorf("%s: %d clustered ties agree with no other, of %d pairs; clusters of %d", name, alone, len(clusters), sc.FalseTies.ClusterSize)
		}
	}
}
