package scenarios

import (
	"math"
	"testing"
)

func TestTracksStayInside(t *testing.T) {
	for _, name := range BuiltinNames() {
		for seed := range uint64(5) {
			sc, w := world(t, name, seed, nil)
			s := newSite(sc, seed)
			worst := math.Inf(1)
			for r := range w.tracks {
				tr := &w.tracks[r]
				for k := range tr.pose {
					worst = min(worst, s.clearance(tr.pose[k].T))
				}
				if lost := sc.Duration - float64(tr.atNS[len(tr.atNS)-1])/1e9; lost > 4*sc.Fleet.KeyframeSpacing/sc.Fleet.SpeedMin {
					t.Errorf("%s, seed %d: robot %d stops %.0f s before the end", name, seed, r, lost)
				}
			}
			if worst < 0.05 {
				t.Errorf("%s, seed %d: a robot comes as near as %.2f m to a wall", name, seed, worst)
			}
		}
	}
}

func TestMovementIsPlausible(t *testing.T) {
	for _, name := range BuiltinNames() {
		sc, w := world(t, name, 1, nil)
		sharp, steps := 0, 0
		for r := range w.tracks {
			tr := &w.tracks[r]
			for k := 1; k < len(tr.pose); k++ {
				e := tr.pose[k-1].Between(tr.pose[k])
				d, dt := distance(tr.pose[k-1].T, tr.pose[k].T), float64(tr.atNS[k]-tr.atNS[k-1])/1e9
				if v := (tr.travel[k] - tr.travel[k-1]) / dt; v < sc.Fleet.SpeedMin*0.999 || v > sc.Fleet.SpeedMax*1.001 {
					t.Fatalf("%s: robot %d goes at %.2f m/s", name, r, v)
				}
				if d > 1.1001*sc.Fleet.KeyframeSpacing {
					t.Fatalf("%s: robot %d steps %.2f m", name, r, d)
				}
				steps++
				xi := e.Log()
				if math.Abs(xi[5]) > 1 {
					sharp++
				} else if e.T[0] < 0 {
					t.Errorf("%s: robot %d goes backwards at keyframe %d", name, r, k)
				}
			}
		}
		if sharp > steps/50 {
			t.Errorf("%s: %d of %d steps turn by more than 57 degrees", name, sharp, steps)
		}
	}
}

func TestLargeFleets(t *testing.T) {
	for _, name := range BuiltinNames() {
		_, w := world(t, name, 1, func(sc *Scenario) { sc.Fleet.Robots = 30 })
		if n := len(joined(w, 30)); n != 30 {
			t.Errorf("%s: true ties join %d of 30 robots", name, n)
		}
	}
}

func TestEachRobotMeetsTwoOthers(t *testing.T) {
	for _, name := range BuiltinNames() {
		for seed := uint64(1); seed <= 4; seed++ {
			_, w := world(t, name, seed, nil)
			if n := len(joined(w, 6)); n != 6 {
				t.Errorf("%s, seed %d: true ties join %d of 6 robots", name, seed, n)
			}
			met := [6][6]int{}
			trueTies := 0
			for i, tie := range w.Survey.Ties {
				if w.TieTrue[i] {
					a, _ := robotNumber(tie.FromRobot)
					b, _ := robotNumber(tie.ToRobot)
					met[a][b]++
					met[b][a]++
					trueTies++
				}
			}
			for r := range met {
				well := 0
				for _, n := range met[r] {
					if n >= 6 {
						well++
					}
				}
				if well < 2 {
					t.Errorf("%s, seed %d: %s meets %v", name, seed, robotID(r), met[r])
				}
			}
			if trueTies < 100 || trueTies > 500 {
				t.Errorf("%s, seed %d: %d true ties", name, seed, trueTies)
			}
		}
	}
}

// joined returns the robots that true ties join with the first.
func joined(w *World, n int) map[int]bool {
	in := map[int]bool{0: true}
	for range n {
		for i, tie := range w.Survey.Ties {
			a, _ := robotNumber(tie.FromRobot)
			b, _ := robotNumber(tie.ToRobot)
			if w.TieTrue[i] && (in[a] || in[b]) {
				in[a], in[b] = true, true
			}
		}
	}
	return in
}

func TestPosition(t *testing.T) {
	_, w := world(t, "mine", 1, short)
	tr := &w.tracks[2]
	last := len(tr.pose) - 1
	for _, c := range []struct {
		ns   int64
		want [3]float64
	}{
		{0, tr.pose[0].T}, {tr.atNS[7], tr.pose[7].T}, {(tr.atNS[7] + tr.atNS[8]) / 2, between(tr.pose[7].T, tr.pose[8].T, 0.5)},
		{tr.atNS[last], tr.pose[last].T}, {w.EndNS, tr.pose[last].T}, {w.EndNS + 1, w.Base},
	} {
		if got := w.Position("r03", c.ns); distance(got, c.want) > 1e-6 {
			t.Errorf("at %d: %v, want %v", c.ns, got, c.want)
		}
	}
}
