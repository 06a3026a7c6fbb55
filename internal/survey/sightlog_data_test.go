package survey

import (
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"testing"
)

// planarBetween is the second pose in the first.
func planarBetween(p, q Pose) (x, y, a float64) {
	pa, qa := 2*math.Atan2(p.Q[2], p.Q[3]), 2*math.Atan2(q.Q[2], q.Q[3])
	s, c := math.Sincos(pa)
	dx, dy := q.T[0]-p.T[0], q.T[1]-p.T[1]
	return c*dx + s*dy, -s*dx + c*dy, math.Remainder(qa-pa, 2*math.Pi)
}

// The recordings are those of Liu, "The UTIAS Multi-Robot Cooperative Localization and Mapping Dataset", International Journal of
// Robotics Research 30(8), 2011.
func recordedLog(t *testing.T, run string) *SightingLog {
	t.Helper()
	return readLog(t, dataset(t, filepath.Join("mrclam", run)))
}

// Converted, a real recording fits its own truth: lag, delay, frames, identities and sigmas are right.
func TestRecordedLogFitsItsTruth(t *testing.T) {
	l := recordedLog(t, "run6")
	type key struct {
		robot string
		id    int64
	}
	index := func(s *Survey) (truth map[key]Pose, byStamp map[key]int64) {
		truth, byStamp = make(map[key]Pose), make(map[key]int64)
		for _, p := range s.Truth {
			truth[key{p.Robot, p.Key}] = p.Pose
		}
		for _, r := range s.Robots {
			for _, k := range r.Keyframes {
				byStamp[key{r.ID, k.StampNS}] = k.ID
			}
		}
		return
	}
	median := func(all []float64) float64 {
		slices.Sort(all)
		return all[len(all)/2]
	}

	// Odometry over 0.3 m each: with the lag of 0.2 s the turning fits better than without, and errors are as large as their sigmas.
	odometry := func(lag float64) (turn, squared float64) {
		o := DefaultSightingLogOptions()
		o.LagS, o.Robots, o.Marks = lag, false, NoMarks
		o.EveryM, o.EveryRad, o.EveryS = 0.3, 100, 1000
		s, _ := convertLog(t, l, o)
		truth, _ := index(s)
		n := 0.0
		for _, r := range s.Robots {
			for _, m := range r.Relatives {
				p, hasP := truth[key{r.ID, m.From}]
				q, hasQ := truth[key{r.ID, m.To}]
				if !hasP || !hasQ {
					continue
				}
				x, y, a := planarBetween(p, q)
				z := 2 * math.Atan2(m.Pose.Q[2], m.Pose.Q[3])
				e := [3]float64{m.Pose.T[0] - x, m.Pose.T[1] - y, math.Remainder(z-a, 2*math.Pi)}
				info, err := m.Cov.Information(2)
				if err != nil {
					t.Fatal(err)
				}
				for i, ci := range [3]int{0, 1, 5} {
					for j, cj := range [3]int{0, 1, 5} {
						squared += e[i] * info[6*ci+cj] * e[j]
					}
				}
				turn += e[2] * e[2]
				n++
			}
		}
		if n < 700 {
			t.Fatalf("%g steps with truth", n)
		}
		return math.Sqrt(turn / n), squared / n
	}
	late, squared := odometry(0.2)
	prompt, _ := odometry(0)
	t.Logf("turn over 0.3 m: %.4f rad, %.4f without the lag; chi-square %.2f of 3", late, prompt, squared)
	if late > 0.9*prompt || squared < 1.5 || squared > 4.5 {
		t.Errorf("turn %.4f rad, %.4f without the lag; chi-square %.2f of 3", late, prompt, squared)
	}

	s, count := convertLog(t, l, DefaultSightingLogOptions())
	if count.Unknown != 6 || count.Kept+count.Outside != 19377-6 || count.Kept < 19000 {
		t.Errorf("%+v", count)
	}
	if len(s.Marks) != 15 || len(s.Robots) != 5 {
		t.Errorf("%d marks, %d robots", len(s.Marks), len(s.Robots))
	}
	truth, byStamp := index(s)
	marks := make(map[string]Pose)
	for _, m := range s.Marks {
		marks[m.Name] = Pose{T: m.T, Q: [4]float64{3: 1}}
	}
	check := func(what string, ranges, bearings []float64, gross int) {
		t.Logf("%s: %d with truth, %d gross; median error %.3f m, %.4f rad", what, len(ranges), gross, median(ranges), median(bearings))
		if len(ranges) < 3000 || gross > 12 || median(ranges) > 0.12 || median(bearings) > 0.01 {
			t.Errorf("%s do not fit", what)
		}
	}
	var ranges, bearings []float64
	gross := 0
	compare := func(p, q Pose, m *Sight) {
		x, y, _ := planarBetween(p, q)
		r, b := math.Abs(m.Value[0]-math.Hypot(x, y)), math.Abs(math.Remainder(m.Value[1]-math.Atan2(y, x), 2*math.Pi))
		if r > 1 || b > 0.3 {
			gross++
		}
		ranges, bearings = append(ranges, r), append(bearings, b)
	}
	for i := range s.Ties {
		m := &s.Ties[i]
		id, ok := byStamp[key{m.ToRobot, m.ToStampNS}]
		if !ok {
			t.Fatalf("tie %s ends between keyframes", m.ID)
		}
		p, hasP := truth[key{m.FromRobot, m.FromKey}]
		q, hasQ := truth[key{m.ToRobot, id}]
		if hasP && hasQ {
			compare(p, q, &m.Sight)
		}
	}
	check("sightings of robots", ranges, bearings, gross)
	ranges, bearings, gross = nil, nil, 0
	for _, r := range s.Robots {
		for i := range r.Sightings {
			m := &r.Sightings[i]
			if p, ok := truth[key{r.ID, m.Key}]; ok {
				compare(p, marks[m.Mark], &m.Sight)
			}
		}
	}
	check("sightings of landmarks", ranges, bearings, gross)
}

// Every recording becomes a survey that can be written, in parts and with private marks too.
func TestRecordedLogsAreSurveys(t *testing.T) {
	for _, c := range []struct {
		run     string
		options func(o *SightingLogOptions)
	}{
		{"run6", func(o *SightingLogOptions) { o.FromS, o.ToS = 100, 300 }},
		{"run1", func(o *SightingLogOptions) { o.FromS, o.ToS, o.Marks, o.ThinS = 200, 500, PrivateMarks, 1 }},
		{"run4", func(o *SightingLogOptions) {
			o.ToS, o.Role, o.Wrong = 300, ControlPoint, Wrong{Share: 0.05, Meetings: true, Seed: 1}
		}},
	} {
		l := recordedLog(t, c.run)
		o := DefaultSightingLogOptions()
		c.options(&o)
		s, count := convertLog(t, l, o)
		dir := filepath.Join(t.TempDir(), "out")
		if err := Write(dir, s); err != nil {
			t.Errorf("%s: %v", c.run, err)
		}
		keyframes, sightings := 0, 0
		for _, r := range s.Robots {
			keyframes, sightings = keyframes+len(r.Keyframes), sightings+len(r.Sightings)
		}
		t.Log(fmt.Sprintf("%s: %+v; %d keyframes, %d ties, %d sightings of %d marks, %d true poses", c.run, count, keyframes, len(s.Ties), sightings, len(s.Marks), len(s.Truth)))
		if len(s.Ties)+sightings != count.Kept || count.Kept < 1000 || (o.Wrong.Share > 0) != (count.Changed > 0) {
			t.Errorf("%s: %+v, %d ties, %d sightings", c.run, count, len(s.Ties), sightings)
		}
	}
}
