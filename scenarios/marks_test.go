package scenarios

import (
	"math"
	"path/filepath"
	"testing"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// sighted is a world in which robots see marks and each other by range and bearing.
func sighted(t *testing.T, site, kind string, change func(sc *Scenario)) (*Scenario, *World) {
	t.Helper()
	sc, err := Builtin(site)
	if err != nil {
		t.Fatal(err)
	}
	sc.Duration, sc.Fleet.Robots, sc.Fleet.StartSpread = 500, 3, 20
	sc.FalseTies.Independent, sc.FalseTies.Clustered = 0, 0
	sc.Ties.EncounterKind, sc.Ties.Spacing, sc.Ties.RevisitRange = kind, 5, 0
	sc.Marks.Count, sc.Marks.Control, sc.Marks.Check, sc.Marks.Kind = 30, 4, 3, kind
	if change != nil {
		change(sc)
	}
	w, err := Simulate(sc, 7)
	if err != nil {
		t.Fatal(err)
	}
	return sc, w
}

// What is true of the sights drawn has the sigmas that it states, what is mistaken has not, and there is as much of it as was asked for.
// The squares are compared by the factors of the estimation, which know nothing of the simulation.
func TestSightsDrawn(t *testing.T) {
	for _, kind := range []string{"position", "range_bearing", "range", "bearing"} {
		for _, site := range []string{"store", "mine"} {
			sc, w := sighted(t, site, kind, func(sc *Scenario) { sc.FalseTies.Mistaken, sc.Duration = 0.2, 1800 })
			s := w.Survey
			pose := newTruthIndex(s).pose
			place := map[string][3]float64{}
			for i, p := range placeMarks(sc, tracksOf(t, sc), &survey.Survey{}, 7) {
				place[markName(i)] = p
			}
			g := posegraph.New(3*(sc.Dimension()-1), nil)
			one := g.AddSightings(adjust.SenseOf(sightKinds[kind]))
			sum, freedoms, wrong, all := 0.0, 0, 0, 0
			judge := func(robot string, from lie.SE3, point [3]float64, x *survey.Sight, isTrue bool) {
				all++
				if !isTrue {
					wrong++
					return
				}
				info, err := x.Information(sc.Dimension())
				if err != nil {
					t.Fatal(err)
				}
				mount, err := adjust.Mounting(s, robot, x.Sensor)
				if err != nil {
					t.Fatal(err)
				}
				g.Values.Poses, g.Values.Points = append(g.Values.Poses, from), append(g.Values.Points, point)
				one.Add(int32(len(g.Values.Poses)-1), int32(len(g.Values.Points)-1), mount, [3]float64{}, x.Value, (*lie.Mat3)(&info))
				sum += one.Chi2(one.Len()-1, &g.Values)
				freedoms += one.Freedoms(one.Len() - 1)
			}
			for r := range s.Robots {
				for i := range s.Robots[r].Sightings {
					m := &s.Robots[r].Sightings[i]
					judge(s.Robots[r].ID, pose[adjust.Key{Robot: s.Robots[r].ID, Session: m.Session, ID: m.Key}], place[m.Mark], &m.Sight, w.SightingTrue[r][i])
				}
			}
			marks := all
			for i := range s.Ties {
				m := &s.Ties[i]
				to := pose[adjust.Key{Robot: m.ToRobot, Session: m.ToSession, ID: m.ToKey}]
				judge(m.FromRobot, pose[adjust.Key{Robot: m.FromRobot, Session: m.FromSession, ID: m.FromKey}], spotOf(&to, sc.Dimension()), &m.Sight, w.TieTrue[i])
			}
			if marks < 50 || all == marks {
				t.Errorf("%s %s: %d sightings of marks and %d ties", site, kind, marks, all-marks)
			}
			n := float64(freedoms)
			if mean := sum / n; math.Abs(mean-1) > 4*math.Sqrt(2/n) {
				t.Errorf("%s %s: mean square %.3f in sigmas of %d", site, kind, mean, freedoms)
			}
			if share := float64(wrong) / float64(all); math.Abs(share-0.2) > 4*math.Sqrt(0.16/float64(all)) {
				t.Errorf("%s %s: %.3f of %d mistaken", site, kind, share, all)
			}
			dir := filepath.Join(t.TempDir(), "s")
			if err := survey.Write(dir, s); err != nil {
				t.Fatal(err)
			}
			back, err := survey.Read(dir)
			if err != nil {
				t.Fatal(err)
			}
			if len(back.Warnings) > 0 || len(back.Ties) != len(s.Ties) {
				t.Errorf("%s %s: reads back with %v", site, kind, back.Warnings)
			}
		}
	}
}

// tracksOf draws the tracks of the world of [sighted] again.
func tracksOf(t *testing.T, sc *Scenario) []*track {
	t.Helper()
	w, err := Simulate(sc, 7)
	if err != nil {
		t.Fatal(err)
	}
	var out []*track
	for i := range w.tracks {
		out = append(out, &w.tracks[i])
	}
	return out
}
