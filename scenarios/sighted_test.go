package scenarios

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"testing"

	"selvage/internal/survey"
)

// recordedTeam is a published recording of five robots that see landmarks and each other by range and bearing (Leung, Halpern, Barfoot,
// Liu, "The UTIAS multi-robot cooperative localization and mapping dataset", IJRR 30(8), 2011), its run 6, until a moment (0: its end).
// Every robot keeps the landmarks to itself, so that only one-way sightings of each other say how their frames lie.
func recordedTeam(t *testing.T, until float64) *survey.Survey {
	t.Helper()
	dir := os.Getenv("SELVAGE_SHARED")
	if dir == "" {
		dir = filepath.Join("..", "..", "shared")
	}
	l, err := survey.ReadSightingLog(filepath.Join(dir, "datasets", "mrclam", "run6"))
	if err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatal(err)
		}
		t.Skip(err)
	}
	o := survey.DefaultSightingLogOptions()
	o.Marks = survey.PrivateMarks
	if until > 0 {
		o.ToS = until
	}
	s, _, err := l.Survey(o)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// The recorded team through agents and coordinator ends where the adjustment in one piece does, and knows where it was to 0.13 m. After
// 300 s one robot has been seen too little to be sure of: it stays apart. SELVAGE_LONG=1 runs 600 s and the whole recording.
func TestRecordedTeamAsAFleet(t *testing.T) {
	cases := []struct {
		until  float64
		joined int
	}{{300, 4}}
	if os.Getenv("SELVAGE_LONG") == "1" {
		cases = append(cases, struct {
			until  float64
			joined int
		}{600, 5}, struct {
			until  float64
			joined int
		}{0, 5})
	}
	for _, c := range cases {
		r, err := Virtual(context.Background(), Recorded(recordedTeam(t, c.until)), Settings{})
		if err != nil {
			t.Fatal(err)
		}
		s, err := r.Score()
		if err != nil {
			t.Fatal(err)
		}
		joined, worst := 0, 0.0
		for i := range s.Robots {
			if s.Robots[i].Joined {
				joined++
				worst = max(worst, *s.Robots[i].AteTeam)
			}
		}
		t.Logf("%g s: %d joined, worst robot %.3f m, ties %+v, rounds %d, gap %.2g", c.until, joined, worst, s.Ties.All, s.Rounds, *s.GapRelative)
		if joined < c.joined || worst > 0.13 || !s.Settled || *s.GapRelative > gapLimit || len(r.Refusals) > 0 {
			t.Errorf("%g s: %d joined, worst robot %.3f m, settled %v, gap %g, refused %v", c.until, joined, worst, s.Settled, *s.GapRelative, r.Refusals)
		}
	}
}

// Fleets that see marks and each other by every sense, some of it mistaken, in the plane and in space, come to the answer of the
// adjustment in one piece, in the datum of the control points, and hold no tie that is of another robot.
func TestSightedFleets(t *testing.T) {
	for _, site := range []string{"store", "mine"} {
		for _, kind := range []string{"range_bearing", "bearing", "range", "position"} {
			t.Run(site+"/"+kind, func(t *testing.T) {
				sc, _ := sighted(t, site, kind, nil)
				sc.Duration, sc.Marks.Kind, sc.Marks.Count, sc.FalseTies.Mistaken = 700, "range_bearing", 60, 0.05
				sc.Radio = RadioSpec{Loss: 0.05, Delay: 0.1}
				w, err := Simulate(sc, 5)
				if err != nil {
					t.Fatal(err)
				}
				r, err := Virtual(context.Background(), w.Outing(sc, 5), Settings{})
				if err != nil {
					t.Fatal(err)
				}
				s, err := r.Score()
				if err != nil {
					t.Fatal(err)
				}
				about := fmt.Sprintf("joined %v, settled %v, ties %+v of which false %+v, rounds %d", len(s.Islands), s.Settled, s.Ties.All, *s.Ties.False, s.Rounds)
				if s.GapRelative == nil {
					t.Fatalf("no common map: %s", about)
				}
				t.Logf("gap %.2g, %s", *s.GapRelative, about)
				if *s.GapRelative > gapLimit || !s.Settled || s.Ties.False.Held > 0 {
					t.Errorf("gap %g, %s", *s.GapRelative, about)
				}
			})
		}
	}
}
