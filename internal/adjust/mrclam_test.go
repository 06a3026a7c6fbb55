package adjust

import (
	"compress/gzip"
	"encoding/csv"
	"io"
	"math"
	"os"
	"path/filepath"
	"slices"
	"sort"
	"strconv"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// The recording is that of Leung, Halpern, Barfoot, Liu, "The UTIAS multi-robot cooperative localization and mapping dataset",
// International Journal of Robotics Research 30(8), 969-974, 2011: five robots among fifteen tubes, run 6.

const (
	robots      = 5
	commandLag  = 0.22 // seconds until the wheels follow
	commandGain = 0.92 // true over commanded speed
)

// sight is one row of a robot's camera.
type sight struct {
	t              float64
	subject        int // 1-5 a robot, above a tube
	metres, radian float64
}

// track is what one robot recorded.
type recording struct {
	at, v, w []float64 // commands
	sights   []sight
	truth    []moment
}

type moment struct {
	t float64
	x lie.SE2
}

func sharedFolder(t testing.TB) string {
	dir := os.Getenv("SELVAGE_SHARED")
	if dir == "" {
		dir = filepath.Join("..", "..", "..", "shared")
	}
	if _, err := os.Stat(dir); err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatalf("test data: %v", err)
		}
		t.Skipf("test data: %v", err)
	}
	return dir
}

// rows calls f for each row of a gzipped table of numbers.
func rows(t testing.TB, name string, f func(x []float64)) {
	file, err := os.Open(name)
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	z, err := gzip.NewReader(file)
	if err != nil {
		t.Fatal(err)
	}
	r := csv.NewReader(z)
	r.ReuseRecord = true
	if _, err := r.Read(); err != nil {
		t.Fatal(err)
	}
	var x []float64
	for {
		row, err := r.Read()
		if err == io.EOF {
			return
		}
		if err != nil {
			t.Fatal(err)
		}
		x = x[:0]
		for _, s := range row {
			v, err := strconv.ParseFloat(s, 64)
			if err != nil {
				t.Fatal(err)
			}
			x = append(x, v)
		}
		f(x)
	}
}

// record reads run 6.
func record(t testing.TB) (fleet [robots]recording) {
	dir := filepath.Join(sharedFolder(t), "datasets", "mrclam", "run6")
	rows(t, filepath.Join(dir, "odometry.csv.gz"), func(x []float64) {
		r := &fleet[int(x[0])-1]
		r.at, r.v, r.w = append(r.at, x[1]+commandLag), append(r.v, commandGain*x[2]), append(r.w, commandGain*x[3])
	})
	rows(t, filepath.Join(dir, "observations.csv.gz"), func(x []float64) {
		if x[2] > 0 {
			r := &fleet[int(x[0])-1]
			r.sights = append(r.sights, sight{x[1], int(x[2]), x[4], x[5]})
		}
	})
	rows(t, filepath.Join(dir, "truth.csv.gz"), func(x []float64) {
		r := &fleet[int(x[0])-1]
		r.truth = append(r.truth, moment{x[1], lie.SE2{X: x[2], Y: x[3], C: math.Cos(x[4]), S: math.Sin(x[4])}})
	})
	return fleet
}

// drive integrates the commands from a to b.
func (r *recording) drive(a, b float64) lie.SE2 {
	x := lie.SE2{C: 1}
	k := sort.SearchFloat64s(r.at, a)
	for t := a; t < b; k++ {
		end := b
		if k < len(r.at) {
			end = math.Min(r.at[k], b)
		}
		if k > 0 && end > t {
			dt := end - t
			x = x.Plus([3]float64{r.v[k-1] * dt, 0, r.w[k-1] * dt})
		}
		t = math.Max(t, end)
	}
	return x
}

// trueAt returns the true pose at a moment, between two rows at most 0.2 s apart.
func (r *recording) trueAt(t float64) (lie.SE2, bool) {
	k := sort.Search(len(r.truth), func(k int) bool { return r.truth[k].t >= t })
	if k == 0 || k == len(r.truth) || r.truth[k].t-r.truth[k-1].t > 0.2 {
		return lie.SE2{}, false
	}
	a, b := &r.truth[k-1], &r.truth[k]
	d := a.x.Between(b.x).Log()
	s := (t - a.t) / (b.t - a.t)
	for i := range d {
		d[i] *= s
	}
	return a.x.Plus(d), true
}

// thin keeps of each subject one sight in every interval, so that a burst with one and the same error counts once.
func thin(sights []sight, interval, until float64) []sight {
	last := map[int]float64{}
	var kept []sight
	for _, s := range sights {
		if at, ok := last[s.subject]; s.t <= until && (!ok || s.t-at >= interval) {
			last[s.subject] = s.t
			kept = append(kept, s)
		}
	}
	return kept
}

// accuracy aligns all poses to the truth with one rigid motion and returns the root mean square and the largest distance.
func accuracy(est, truth [][2]float64) (rms, worst float64) {
	var ce, ct [2]float64
	n := float64(len(est))
	for i := range est {
		for c := range ce {
			ce[c] += est[i][c] / n
			ct[c] += truth[i][c] / n
		}
	}
	var s, c float64
	for i := range est {
		ex, ey, tx, ty := est[i][0]-ce[0], est[i][1]-ce[1], truth[i][0]-ct[0], truth[i][1]-ct[1]
		c += ex*tx + ey*ty
		s += ex*ty - ey*tx
	}
	h := math.Hypot(c, s)
	c, s = c/h, s/h
	for i := range est {
		ex, ey := est[i][0]-ce[0], est[i][1]-ce[1]
		d := math.Hypot(c*ex-s*ey-truth[i][0]+ct[0], s*ex+c*ey-truth[i][1]+ct[1])
		rms += d * d / n
		worst = math.Max(worst, d)
	}
	return math.Sqrt(rms), worst
}

// The cameras: sigmas that cover their slowly varying errors too, and how much earlier than its stamp a row was true.
const (
	rangeSigma   = 0.10 // and
	rangeShare   = 0.02 // of the range
	bearingSigma = 0.03
	lookBack     = 0.05
)

// Odometry sigmas for a root second: forward, sideways, turn.
var wheels = [3]float64{0.012, 0.004, 0.027}

// recorded is the recording until a moment as a survey: a keyframe wherever something was seen, and at every full second. With marks,
// each robot has tubes of its own, for nothing says that two robots mean the same one.
func recorded(fleet *[robots]recording, until float64, marks bool) *survey.Survey {
	var s survey.Survey
	s.Meta.Dimension = 2
	var tubes, others [robots][]sight
	var times [robots][]float64
	for i := range fleet {
		r := &fleet[i]
		s.Robots = append(s.Robots, survey.Robot{ID: strconv.Itoa(i + 1)})
		var a, b []sight
		for _, s := range r.sights {
			s.t -= lookBack
			if s.subject > robots {
				a = append(a, s)
			} else {
				b = append(b, s)
			}
		}
		if marks {
			tubes[i] = thin(a, 1, until)
		}
		others[i] = thin(b, 0.5, until)
		for k := 0.0; k < math.Min(until, r.truth[len(r.truth)-1].t); k++ {
			times[i] = append(times[i], k)
		}
	}
	for i := range fleet {
		for _, s := range tubes[i] {
			times[i] = append(times[i], s.t)
		}
		for _, s := range others[i] {
			times[i] = append(times[i], s.t)
			times[s.subject-1] = append(times[s.subject-1], s.t)
		}
	}
	for i := range fleet {
		slices.Sort(times[i])
		times[i] = slices.Compact(times[i])
		r, x := &s.Robots[i], lie.SE2{C: 1}
		for k, t := range times[i] {
			if k > 0 {
				d := fleet[i].drive(times[i][k-1], t)
				x = x.Mul(d)
				step := d.Spatial()
				dt := math.Sqrt(t - times[i][k-1])
				cov := survey.Cov{Sigma: [6]float64{wheels[0] * dt, wheels[1] * dt, math.Inf(1), math.Inf(1), math.Inf(1), wheels[2] * dt}}
				r.Relatives = append(r.Relatives, survey.Relative{From: int64(k - 1), To: int64(k), Pose: Folder(&step), Cov: cov})
			}
			pose := x.Spatial()
			r.Keyframes = append(r.Keyframes, survey.Keyframe{ID: int64(k), StampNS: int64(math.Round(t * 1e9)), HasStamp: true, Pose: Folder(&pose)})
		}
	}
	key := func(robot int, t float64) int64 {
		k, ok := slices.BinarySearch(times[robot], t)
		if !ok {
			panic("no keyframe")
		}
		return int64(k)
	}
	named := map[string]bool{}
	for i := range fleet {
		of := func(e sight) survey.Sight {
			return survey.Sight{Value: [3]float64{e.metres, e.radian}, Sigma: [3]float64{rangeSigma + rangeShare*e.metres, bearingSigma, math.Inf(1)}}
		}
		for _, e := range tubes[i] {
			name := strconv.Itoa(i+1) + "-" + strconv.Itoa(e.subject)
			if !named[name] {
				named[name] = true
				s.Marks = append(s.Marks, survey.Mark{Name: name})
			}
			s.Robots[i].Sightings = append(s.Robots[i].Sightings, survey.Sighting{Key: key(i, e.t), Mark: name, Kind: survey.RangeBearing, Sight: of(e)})
		}
		for _, e := range others[i] {
			s.Ties = append(s.Ties, survey.Tie{ID: strconv.Itoa(len(s.Ties)), FromRobot: strconv.Itoa(i + 1), FromKey: key(i, e.t),
				ToRobot: strconv.Itoa(e.subject), ToKey: key(e.subject-1, e.t), Kind: survey.RangeBearing, Sight: of(e)})
		}
	}
	return &s
}

// offTruth aligns the whole team to the truth, or each robot by itself, and compares at the full seconds.
func offTruth(fleet *[robots]recording, s *survey.Survey, p *Problem, each bool) (rms, worst float64) {
	var est, truth [][2]float64
	sum, n := 0.0, 0
	for i := range s.Robots {
		for _, k := range s.Robots[i].Keyframes {
			if k.StampNS%1e9 != 0 {
				continue
			}
			if w, ok := fleet[i].trueAt(float64(k.StampNS / 1e9)); ok {
				x := p.Graph.Values.Poses[p.Var[Key{Robot: s.Robots[i].ID, ID: k.ID}]]
				est, truth = append(est, [2]float64{x.T[0], x.T[1]}), append(truth, [2]float64{w.X, w.Y})
			}
		}
		if each || i == robots-1 {
			r, w := accuracy(est, truth)
			sum, n, worst = sum+r*r*float64(len(est)), n+len(est), math.Max(worst, w)
			est, truth = nil, nil
		}
	}
	return math.Sqrt(sum / float64(n)), worst
}

// begun is the problem with its start: nothing is told of how the frames of the robots stand to each other.
func begun(t *testing.T, s *survey.Survey) *Problem {
	p, err := New(s, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(Auto); err != nil {
		t.Fatal(err)
	}
	if p.Islands != 1 {
		t.Fatalf("%d islands, want the whole team in one", p.Islands)
	}
	return p
}

// solo adjusts each robot by itself, leaving out what it saw of others.
func solo(t *testing.T, s *survey.Survey) *Problem {
	p, err := New(s, func(int) bool { return false })
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(Auto); err != nil {
		t.Fatal(err)
	}
	if p.Islands != robots {
		t.Fatalf("%d islands without what robots saw of each other, want %d", p.Islands, robots)
	}
	analysed(t, p).SolveRobust(posegraph.DefaultOptions(), nil)
	return p
}

func analysed(t *testing.T, p *Problem) *Problem {
	if err := p.Analyse(1); err != nil {
		t.Fatal(err)
	}
	return p
}

func TestRecordedTeam(t *testing.T) {
	fleet := record(t)
	for _, c := range []struct {
		until, together, worst, frames, robots float64
	}{
		{300, 0.13, math.Inf(1), 0.25, 0.25},
		{600, 0.13, 0.40, 0.18, 0.55},
		{900, 0.13, math.Inf(1), 0.18, 0.55},
	} {
		if testing.Short() && c.until > 300 {
			continue
		}
		s := recorded(&fleet, c.until, true)
		alone, _ := offTruth(&fleet, s, solo(t, s), true)
		p := begun(t, s)
		res := analysed(t, p).SolveRobust(posegraph.DefaultOptions(), nil)
		rms, worst := offTruth(&fleet, s, p, false)
		t.Logf("%.0f s: alone %.3f m, together %.3f, worst %.3f; %v, %d of %d sightings cut", c.until, alone, rms, worst, res.Stop, res.Refused, len(p.Sights()))
		if res.Stop != posegraph.Converged || rms > c.together || worst > c.worst {
			t.Errorf("%.0f s: together %.3f m, worst %.3f, %v; want at most %.2f, %.2f", c.until, rms, worst, res.Stop, c.together, c.worst)
		}
		if c.until == 600 {
			if rms > 0.85*alone {
				t.Errorf("together %.3f m, alone %.3f: want 15 %% less", rms, alone)
			}
			for _, e := range p.Sights() {
				e.Set.W[e.K] = 1
			}
			o := posegraph.DefaultOptions()
			o.MaxIterations = 60 // it is far from settling after 500
			res := p.Solve(o)
			plain, worst := offTruth(&fleet, s, p, false)
			t.Logf("every sighting believed: %.3f m, worst %.3f, %v", plain, worst, res.Stop)
			if plain < 2*rms {
				t.Errorf("believing every sighting gives %.3f m, leaving wrong ones out %.3f: want half", plain, rms)
			}
		}

		r, err := p.FramesOnly(posegraph.DefaultOptions())
		if err != nil {
			t.Fatal(err)
		}
		rms, worst = offTruth(&fleet, s, p, false)
		t.Logf("%.0f s: frames only %.3f m, worst %.3f", c.until, rms, worst)
		if r.Stop != posegraph.Converged || rms > c.frames {
			t.Errorf("%.0f s: frames only %.3f m, %v; want at most %.2f", c.until, rms, r.Stop, c.frames)
		}

		s = recorded(&fleet, c.until, false)
		reckoned, _ := offTruth(&fleet, s, solo(t, s), true)
		p = begun(t, s)
		analysed(t, p).SolveRobust(posegraph.DefaultOptions(), nil)
		rms, worst = offTruth(&fleet, s, p, false)
		t.Logf("%.0f s: dead reckoning %.3f m, with sightings of each other %.3f, worst %.3f", c.until, reckoned, rms, worst)
		if rms > c.robots || rms > 0.6*reckoned {
			t.Errorf("%.0f s: without tubes %.3f m, dead reckoning %.3f; want at most %.2f and 0.6 of it", c.until, rms, reckoned, c.robots)
		}
	}
}
