package survey

import (
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

// logFolder writes a log of two robots: r1 drives a quarter of a circle of radius 1 m in 10 s, stands, and turns back; r2 drives
// straight. Both see each other, and landmarks 6 and 7.
func logFolder(t testing.TB) string {
	t.Helper()
	dir := t.TempDir()
	put := func(name, text string) {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	put("run.json", `{"time_origin_unix_s": 1000000000.5, "run": 6}`)
	put("odometry.csv", fmt.Sprintf("robot,t_s,v_mps,w_radps\n1,0,%[1]v,%[1]v\n2,0,0.5,0\n1,10,0,0\n1,12,%[1]v,-%[1]v\n1,22,0,0\n2,22,0,0\n", math.Pi/20))
	put("observations.csv", `observer,t_s,subject,barcode,range_m,bearing_rad
1,3,2,14,2,0.5
1,3.25,2,14,2.1,0.4
1,3.5,2,14,2.2,0.3
2,4,6,3,1,-0.5
1,4,6,3,3,0.1
1,5,0,99,3,0.1
1,40,2,14,3,0.1
2,15,1,5,3,0.1
2,15,7,8,4,0.2
`)
	put("landmarks_truth.csv", "subject,x_m,y_m,x_sd_m,y_sd_m\n6,1,2,0.001,0.002\n8,3,4,0.001,0.002\n")
	put("truth.csv", "robot,t_s,x_m,y_m,theta_rad\n1,2.5,10,20,3.1\n1,3,11,22,-3.1\n1,9,12,23,0\n")
	return dir
}

func logOptions() SightingLogOptions {
	o := DefaultSightingLogOptions()
	o.EveryM, o.EveryRad, o.EveryS = 100, 100, 100
	return o
}

func readLog(t testing.TB, dir string) *SightingLog {
	t.Helper()
	l, err := ReadSightingLog(dir)
	if err != nil {
		t.Fatal(err)
	}
	return l
}

func convertLog(t testing.TB, l *SightingLog, o SightingLogOptions) (*Survey, LogCount) {
	t.Helper()
	s, count, err := l.Survey(o)
	if err != nil {
		t.Fatal(err)
	}
	return s, count
}

func TestSightingLog(t *testing.T) {
	l := readLog(t, logFolder(t))
	s, count := convertLog(t, l, logOptions())
	if diff := cmp.Diff(LogCount{Unknown: 1, Outside: 1, Kept: 7}, count); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	const origin = 1000000000500000000
	stamps := func(r *Robot) (out []float64) {
		for _, k := range r.Keyframes {
			out = append(out, float64(k.StampNS-origin)/1e9)
		}
		return out
	}
	// The first, the sightings of either side 0.05 s earlier, and when the last command has taken effect.
	if diff := cmp.Diff([]float64{0, 2.95, 3.2, 3.45, 3.95, 14.95, 22.2}, stamps(&s.Robots[0])); diff != "" {
		t.Errorf("r1 (-want +got):\n%s", diff)
	}
	if diff := cmp.Diff([]float64{0, 2.95, 3.2, 3.45, 3.95, 14.95, 22.2}, stamps(&s.Robots[1])); diff != "" {
		t.Errorf("r2 (-want +got):\n%s", diff)
	}
	// The quarter circle to the left took effect from 0.2 to 10.2 s, the one to the right from 12.2 to 22.2 s.
	where := func(seconds float64) (x, y, a float64) {
		a = math.Pi / 20 * (min(seconds, 10.2) - 0.2)
		x, y = math.Sin(a), 1-math.Cos(a)
		if seconds > 12.2 {
			b := math.Pi / 20 * (seconds - 12.2)
			x, y, a = 1+1-math.Cos(b), 1+math.Sin(b), a-b
		}
		return
	}
	for i, seconds := range stamps(&s.Robots[0])[1:] {
		x, y, a := where(seconds)
		p := s.Robots[0].Keyframes[i+1].Pose
		if e := math.Hypot(p.T[0]-x, p.T[1]-y); e > 1e-12 || math.Abs(2*math.Atan2(p.Q[2], p.Q[3])-a) > 1e-12 {
			t.Errorf("r1 is at %v at %g s, want %g %g %g", p, seconds, x, y, a)
		}
	}
	if p := s.Robots[1].Keyframes[6].Pose; math.Abs(p.T[0]-11) > 1e-12 || p.T[1] != 0 {
		t.Errorf("r2 ends at %v", p)
	}
	tie := s.Ties[0]
	want := Tie{ID: "s000001", FromRobot: "r1", FromSession: 1, FromKey: 1, ToRobot: "r2", ToSession: 1, ToStampNS: origin + 2.95e9, ToByStamp: true,
		Kind: RangeBearing, Sight: Sight{Value: [3]float64{2, 0.5, 0}, Sigma: [3]float64{0.15, 0.02, inf}}, Source: "camera", StampNS: origin + 2.95e9, HasStamp: true}
	if diff := cmp.Diff(want, tie); diff != "" || len(s.Ties) != 4 {
		t.Errorf("%d ties (-want +got):\n%s", len(s.Ties), diff)
	}
	marks := []Mark{{Name: "m6", Role: CheckPoint, T: [3]float64{1, 2, 0}, Sigma: [3]float64{0.001, 0.002, inf}}, {Name: "m7"}}
	if diff := cmp.Diff(marks, s.Marks); diff != "" {
		t.Errorf("marks (-want +got):\n%s", diff)
	}
	sightings := []Sighting{
		{Session: 1, Key: 4, Mark: "m6", Kind: RangeBearing, Sight: Sight{Value: [3]float64{1, -0.5, 0}, Sigma: [3]float64{0.15, 0.02, inf}}},
		{Session: 1, Key: 5, Mark: "m7", Kind: RangeBearing, Sight: Sight{Value: [3]float64{4, 0.2, 0}, Sigma: [3]float64{0.15, 0.02, inf}}},
	}
	if diff := cmp.Diff(sightings, s.Robots[1].Sightings); diff != "" {
		t.Errorf("sightings of r2 (-want +got):\n%s", diff)
	}
	// The truth at 2.95 s, the short way round; none across the hole of 6 s that follows.
	if len(s.Truth) != 1 || s.Truth[0].Key != 1 || math.Abs(s.Truth[0].Pose.T[0]-10.9) > 1e-9 || math.Abs(s.Truth[0].Pose.T[1]-21.8) > 1e-9 ||
		math.Abs(math.Remainder(2*math.Atan2(s.Truth[0].Pose.Q[2], s.Truth[0].Pose.Q[3])-(3.1+0.9*(2*math.Pi-6.2)), 2*math.Pi)) > 1e-9 {
		t.Errorf("truth %v", s.Truth)
	}

	// What is made is a survey that can be written and read again.
	out := filepath.Join(t.TempDir(), "out")
	if err := Write(out, s); err != nil {
		t.Fatal(err)
	}
	back, err := Read(out)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(s, back); diff != "" {
		t.Errorf("(-made +read):\n%s", diff)
	}
}

func TestSightingLogChoices(t *testing.T) {
	l := readLog(t, logFolder(t))
	o := logOptions()
	o.ThinS, o.Marks, o.Role = 0.3, PrivateMarks, PlainMark
	s, count := convertLog(t, l, o)
	if count.Thinned != 1 || len(s.Ties) != 3 || s.Ties[1].Sight.Value[0] != 2.2 { // 3.25 s comes too soon after 3 s, 3.5 s does not
		t.Errorf("thinned: %+v, %d ties", count, len(s.Ties))
	}
	if diff := cmp.Diff([]Mark{{Name: "r2.m6"}, {Name: "r1.m6"}, {Name: "r2.m7"}}, s.Marks); diff != "" {
		t.Errorf("private marks (-want +got):\n%s", diff)
	}
	o = logOptions()
	o.Robots, o.Role = false, ControlPoint
	s, count = convertLog(t, l, o)
	if count.Unasked != 4 || len(s.Ties) != 0 || s.Marks[0].Role != ControlPoint {
		t.Errorf("no robots: %+v, %d ties, marks %v", count, len(s.Ties), s.Marks)
	}
	o = logOptions()
	o.Marks, o.FromS, o.ToS = NoMarks, 3.1, 14
	s, count = convertLog(t, l, o)
	// Outside: at 3 s, 40 s and twice at 15 s.
	if diff := cmp.Diff(LogCount{Unknown: 1, Outside: 4, Unasked: 2, Kept: 2}, count); diff != "" || len(s.Ties) != 2 || len(s.Marks) != 0 {
		t.Errorf("a part of it (-want +got):\n%s", diff)
	}
	if k := s.Robots[0].Keyframes; k[0].StampNS-l.originNS != 3.1e9 || k[len(k)-1].StampNS-l.originNS != 14e9 || k[0].Pose != Identity() {
		t.Errorf("keyframes %v", k)
	}
	if p := s.Robots[0].Keyframes[len(s.Robots[0].Keyframes)-1].Pose; math.Abs(2*math.Atan2(p.Q[2], p.Q[3])-math.Pi/20*(7.1-1.8)) > 1e-12 {
		t.Errorf("r1 has turned by %g: the command at the beginning was missed", 2*math.Atan2(p.Q[2], p.Q[3]))
	}
	// Spacing: r2 drives 11 m in 22 s.
	o = logOptions()
	o.Marks, o.Robots, o.EveryM = NoMarks, false, 2
	s, _ = convertLog(t, l, o)
	for i, k := range s.Robots[1].Keyframes[:6] {
		if math.Abs(k.Pose.T[0]-2*float64(i)) > 1e-8 {
			t.Errorf("keyframe %d at %g m", i, k.Pose.T[0])
		}
	}
	o.EveryM, o.EveryRad = 100, math.Pi/8
	s, _ = convertLog(t, l, o)
	if n := len(s.Robots[0].Keyframes); n != 9 && n != 10 { // two turns of pi/2, and the end
		t.Errorf("%d keyframes by turning", n)
	}
	o.EveryRad, o.EveryS = 100, 3
	s, _ = convertLog(t, l, o)
	if n := len(s.Robots[1].Keyframes); n != 9 { // 0, 3 ... 21, 22.2
		t.Errorf("%d keyframes by time", n)
	}
	for name, change := range map[string]func(o *SightingLogOptions){
		"sigma of a range is 0":       func(o *SightingLogOptions) { o.SigmaRange = 0 },
		"way between keyframes is":    func(o *SightingLogOptions) { o.EveryM = 0 },
		"lag of commands is -1":       func(o *SightingLogOptions) { o.LagS = -1 },
		"part of the log from 5 to 4": func(o *SightingLogOptions) { o.FromS, o.ToS = 5, 4 },
		"odometry drift is NaN":       func(o *SightingLogOptions) { o.Odometry.Drift = math.NaN() },
		"wrong identities is 2":       func(o *SightingLogOptions) { o.Wrong.Share = 2 },
	} {
		o := logOptions()
		change(&o)
		if _, _, err := l.Survey(o); err == nil || !strings.Contains(err.Error(), name) {
			t.Errorf("got %v, want %s", err, name)
		}
	}
}

// On a straight way the variances are known: sideways grows with the length and, through the heading, with its cube; see any text on
// random walks. On arcs the covariance is that of many simulated walks.
func TestReckonedCovariance(t *testing.T) {
	const v, T = 0.5, 20.0
	n := OdometryNoise{Forward: 0.07, Sideways: 0.04, Drift: 0.05, Turn: 0.15}
	k := walk{noise: n, everyM: 1e9, everyRad: 1e9, everyNS: 1e18}
	k.drive(&command{v: v}, T*1e9)
	s, still := v*T, standing*standing
	perM := n.Drift*n.Drift + still/v
	want := [3][3]float64{
		{n.Forward*n.Forward*s + still*T, 0, 0},
		{0, n.Sideways*n.Sideways*s + still*T + perM*s*s*s/3, perM * s * s / 2},
		{0, perM * s * s / 2, perM * s},
	}
	for i := range 3 {
		for j := range 3 {
			if e := math.Abs(k.p[i][j] - want[i][j]); e > 0.01*math.Abs(want[i][j]) { // steps of 5 cm
				t.Errorf("entry %d, %d is %g, want %g", i, j, k.p[i][j], want[i][j])
			}
		}
	}

	// Two arcs, against 40 000 walks with the noise added step by step.
	arcs := []command{{v: 0.5, w: 0.4}, {v: -0.3, w: -0.7}}
	k.restart()
	for i := range arcs {
		k.drive(&arcs[i], 5e9)
	}
	rng := rand.New(rand.NewPCG(1, 2))
	var sum [3][3]float64
	const walks = 40000
	for range walks {
		var x, y, a float64
		for _, c := range arcs {
			for range 50 {
				const dt = 0.1
				turn := c.w * dt
				dx, dy := c.v/c.w*math.Sin(turn), c.v/c.w*(1-math.Cos(turn))
				sin, cos := math.Sincos(a)
				x, y, a = x+cos*dx-sin*dy, y+sin*dx+cos*dy, a+turn
				way, angle := math.Abs(c.v*dt), math.Abs(turn)
				ex, ey := n.Forward*math.Sqrt(way)*rng.NormFloat64(), n.Sideways*math.Sqrt(way)*rng.NormFloat64()
				ea := math.Sqrt(n.Drift*n.Drift*way+n.Turn*n.Turn*angle) * rng.NormFloat64() / 10 // small, so that the first order holds
				sin, cos = math.Sincos(a)
				x, y, a = x+(cos*ex-sin*ey)/10, y+(sin*ex+cos*ey)/10, a+ea
			}
		}
		sin, cos := math.Sincos(k.a)
		e := [3]float64{cos*(x-k.x) + sin*(y-k.y), -sin*(x-k.x) + cos*(y-k.y), a - k.a}
		for i := range 3 {
			for j := range 3 {
				sum[i][j] += 100 * e[i] * e[j] / walks
			}
		}
	}
	for i := range 3 {
		for j := range 3 {
			if e := math.Abs(k.p[i][j]-sum[i][j]) / math.Sqrt(k.p[i][i]*k.p[j][j]); e > 0.03 { // six sigma of 40 000 walks
				t.Errorf("entry %d, %d is %g, %g over many walks", i, j, k.p[i][j], sum[i][j])
			}
		}
	}
	c := k.cov()
	if info, err := c.Information(2); err != nil || info[0] == 0 {
		t.Errorf("information %v, %v", info, err)
	}
}

func TestBadSightingLogs(t *testing.T) {
	for _, c := range []struct {
		name, file string
		change     func(string) string
		want       string
	}{
		{"robot", "odometry.csv", swap("\n2,0,", "\n0,0,"), `odometry.csv:3: column robot: found "0", expected 1 to 1048576`},
		{"time", "odometry.csv", swap("\n2,0,", "\n2,1e9,"), `odometry.csv:3: column t_s: found "1e9", expected -1000000 to 1000000`},
		{"speed", "odometry.csv", swap("0.5,0", "5000,0"), `odometry.csv:3: column v_mps: found "5000", expected -1000 to 1000`},
		{"no commands", "odometry.csv", func(string) string { return "robot,t_s,v_mps,w_radps\n" },
			"odometry.csv: found no rows, expected what the robots drove"},
		{"observer", "observations.csv", swap("1,3,2", "6,3,2"), `observations.csv:2: column observer: found "6", expected a robot of which odometry.csv has rows`},
		{"itself", "observations.csv", swap("1,3,2", "1,3,1"), `observations.csv:2: column subject: found "1", expected another subject than the observer`},
		{"range", "observations.csv", swap("14,2,0.5", "14,0,0.5"), `observations.csv:2: column range_m: found "0", expected 1e-06 to 1e+09`},
		{"degrees", "observations.csv", swap("14,2,0.5", "14,2,45"), `observations.csv:2: column bearing_rad: found "45", expected -6.28318531 to 6.28318531`},
		{"landmark twice", "landmarks_truth.csv", swap("8,3", "6,3"), `landmarks_truth.csv:3: column subject: found "6" a second time, expected each landmark once`},
		{"landmark that drives", "landmarks_truth.csv", swap("8,3", "2,3"), `landmarks_truth.csv:3: column subject: found "2", expected a landmark: this is a robot of which odometry.csv has rows`},
		{"landmark without sigma", "landmarks_truth.csv", swap("0.001,0.002\n8", "0,0.002\n8"), `landmarks_truth.csv:2: column x_sd_m: found "0", expected a number from 1e-12 to 1e+12`},
		{"truth", "truth.csv", swap("10,20,3.1", "10,20,x"), `truth.csv:2: column theta_rad: found "x", expected a finite decimal number`},
		{"run", "run.json", swap("{", "{\n{"), "run.json:2: found invalid character '{' looking for beginning of object key string, expected a JSON object"},
		{"origin", "run.json", swap("1000000000.5", "1e18"), "run.json: column time_origin_unix_s: found 1e+18, expected at most 9e+09 s either way"},
		{"no observations", "observations.csv", nil, "observations.csv: found no such file, expected this table, or observations.csv.gz"},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := logFolder(t)
			edit(t, dir, c.file, c.change)
			l, err := ReadSightingLog(dir)
			if l != nil || err == nil || !strings.HasPrefix(err.Error(), c.want) {
				t.Errorf("got %v, want %s", err, c.want)
			}
			if err != nil && c.name != "no commands" && strings.Contains(err.Error(), "\n") {
				t.Errorf("one mistake, several violations:\n%v", err)
			}
		})
	}
}

// Wrong identities: as many as asked for, each to another of its sort, whole meetings where asked for, and the same again from the same
// seed.
func TestWrongIdentities(t *testing.T) {
	dir := logFolder(t)
	edit(t, dir, "odometry.csv", func(s string) string { return s + "3,0,0.1,0\n3,100,0,0\n4,0,0.1,0\n4,100,0,0\n1,100,0,0\n2,100,0,0\n" })
	edit(t, dir, "observations.csv", func(string) string {
		var b strings.Builder
		b.WriteString("observer,t_s,subject,range_m,bearing_rad\n")
		for i := range 400 { // meetings of four rows; the same two meet again after 3.6 s
			fmt.Fprintf(&b, "%d,%g,%d,2,%g\n", 1+i/4%2, 1+0.9*float64(i/4)+0.05*float64(i%4), []int{3, 4, 6, 7}[i/4%4], float64(i)/1000)
		}
		return b.String()
	})
	l := readLog(t, dir)
	right, _ := convertLog(t, l, logOptions())
	byBearing := func(s *Survey) map[float64]string {
		subject := make(map[float64]string)
		for _, m := range s.Ties {
			subject[m.Sight.Value[1]] = m.ToRobot
		}
		for _, r := range s.Robots {
			for _, m := range r.Sightings {
				subject[m.Sight.Value[1]] = m.Mark
			}
		}
		return subject
	}
	truth := byBearing(right)
	for _, meetings := range []bool{false, true} {
		o := logOptions()
		o.Wrong = Wrong{Share: 0.1, Meetings: meetings, Seed: 3}
		s, count := convertLog(t, l, o)
		if count.Kept != 400 || count.Changed != 40 {
			t.Errorf("meetings %v: %+v", meetings, count)
		}
		changed, marked := 0, 0
		for at, subject := range byBearing(s) {
			if subject == truth[at] {
				continue
			}
			changed++
			if subject[0] != truth[at][0] {
				t.Errorf("%s became %s", truth[at], subject)
			}
		}
		for _, x := range s.Injected {
			var sight *Sight
			named := ""
			if x.Tie != "" {
				marked++
				tie := &s.Ties[slices.IndexFunc(s.Ties, func(m Tie) bool { return m.ID == x.Tie })]
				sight, named = &tie.Sight, tie.ToRobot
				if tie.FromRobot != x.Robot || tie.FromKey != x.Key || named == x.Robot {
					t.Errorf("%+v is on record for %+v", x, tie)
				}
			} else {
				r := &s.Robots[slices.IndexFunc(s.Robots, func(r Robot) bool { return r.ID == x.Robot })]
				m := &r.Sightings[x.Row-1]
				sight, named = &m.Sight, m.Mark
				if m.Key != x.Key {
					t.Errorf("%+v is on record for %+v", x, m)
				}
			}
			if x.Was != truth[sight.Value[1]] || x.Named != named || x.Was == x.Named {
				t.Errorf("%+v is on record for %s said to be %s", x, truth[sight.Value[1]], named)
			}
		}
		if changed != count.Changed || len(s.Injected) != changed || marked == 0 || marked == changed {
			t.Errorf("meetings %v: %d identities changed, %d on record, %d of ties, %+v", meetings, changed, len(s.Injected), marked, count)
		}
		out := filepath.Join(t.TempDir(), "out")
		for range 2 { // the record does not keep a survey from being written again
			if err := Write(out, s); err != nil {
				t.Fatal(err)
			}
		}
		text, err := os.ReadFile(filepath.Join(out, "injected.csv"))
		if lines := strings.Count(string(text), "\n"); err != nil || lines != changed+1 || !strings.HasPrefix(string(text), "robot,session,keyframe,tie,row,was,named\n") {
			t.Errorf("%d lines of record, error %v", lines, err)
		}
		if back, err := Read(out); err != nil || back.Injected != nil || len(back.Warnings) > 0 {
			t.Errorf("read back: %v, %v, error %v", back.Injected, back.Warnings, err)
		}
		again, _ := convertLog(t, l, o)
		if diff := cmp.Diff(s, again); diff != "" {
			t.Errorf("the same seed gives another survey:\n%s", diff)
		}
		o.Wrong.Seed++
		other, _ := convertLog(t, l, o)
		if cmp.Equal(byBearing(s), byBearing(other)) {
			t.Error("another seed gives the same identities")
		}
	}
}

// FuzzSightingLog reads anything as what robots have seen.
func FuzzSightingLog(f *testing.F) {
	dir := logFolder(f)
	f.Add([]byte(edit(f, dir, "observations.csv", func(s string) string { return s })))
	f.Fuzz(func(t *testing.T, data []byte) {
		if err := os.WriteFile(filepath.Join(dir, "observations.csv"), data, 0o644); err != nil {
			t.Fatal(err)
		}
		l, err := ReadSightingLog(dir)
		if (l == nil) == (err == nil) {
			t.Fatalf("log %v, error %v", l, err)
		}
		if err != nil {
			return
		}
		s, count := convertLog(t, l, logOptions())
		if count.Kept+count.Unknown+count.Outside+count.Thinned+count.Unasked != len(l.sightings) {
			t.Fatalf("%d sightings, %+v", len(l.sightings), count)
		}
		out := filepath.Join(t.TempDir(), "out")
		if err := Write(out, s); err != nil {
			t.Fatal(err)
		}
	})
}
