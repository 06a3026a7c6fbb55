package coordinator

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
	"selvage/partition"
)

// yard is a made site with marks, and robots that walk in it, each with a map of its own.
type yard struct {
	dim    int
	rng    *rand.Rand
	marks  [][3]float64
	robots []*walker
	number uint64
	ties   []*msgs.Tie
}

// walker is a robot with the graph that its agent would have: poses every metre, keyframe ids 10 times their number.
type walker struct {
	y      *yard
	name   string
	real   []lie.SE3
	g      *posegraph.Graph
	links  *posegraph.Between
	sights *posegraph.Sightings
	seen   []string // point -> mark
	ends   map[int]bool
	wanted []string

	version uint64
	up      *[3]float64 // in the frame of its first pose, when the robot knows the vertical
}

const (
	sensorRange = 15.0
	linkM       = 0.02
	linkRad     = 0.004
	levelRad    = 0.01
)

func newYard(dim, robots, poses, marks int, seed uint64) *yard {
	y := &yard{dim: dim, rng: rand.New(rand.NewPCG(seed, 31))}
	for range marks {
		m := [3]float64{40 * y.rng.Float64(), 40 * y.rng.Float64(), 6 * y.rng.Float64()}
		if dim == 2 {
			m[2] = 0
		}
		y.marks = append(y.marks, m)
	}
	for i := range robots {
		y.robots = append(y.robots, y.walk(fmt.Sprintf("r%d", i+1), poses))
	}
	return y
}

func (y *yard) noise(m, rad float64) (t lie.Tangent) {
	for i := range t {
		t[i] = m * y.rng.NormFloat64()
		if i > 2 {
			t[i] = rad * y.rng.NormFloat64()
		}
	}
	if y.dim == 2 {
		t[2], t[3], t[4] = 0, 0, 0
	}
	return t
}

func (y *yard) walk(name string, poses int) *walker {
	r := &walker{y: y, name: name, ends: map[int]bool{}}
	x := lie.Exp(lie.Tangent{5: 6 * y.rng.Float64()})
	x.T = [3]float64{10 + 20*y.rng.Float64(), 10 + 20*y.rng.Float64()}
	turn := 0.1
	for len(r.real) < poses {
		r.real = append(r.real, x)
		turn = max(-0.3, min(0.3, turn+0.1*y.rng.NormFloat64()))
		step := lie.Tangent{0: 1, 5: turn}
		if p := x.T; p[0] < 3 || p[0] > 37 || p[1] < 3 || p[1] > 37 {
			step[5] = 0.5
		}
		if y.dim == 3 {
			step[2] = 0.1 * math.Sin(float64(len(r.real))/4)
		}
		x = x.Plus(step)
		if y.dim == 2 {
			x = lie.Planar(&x).Spatial()
		}
	}
	frame := lie.Exp(y.noise(20, 1))
	own := []lie.SE3{frame.Mul(r.real[0])}
	r.g = posegraph.New(3*(y.dim-1), own)
	r.links = r.g.AddBetween()
	var info [36]float64
	for i := range 6 {
		info[7*i] = 1 / (linkM * linkM)
		if i > 2 {
			info[7*i] = 1 / (linkRad * linkRad)
		}
	}
	if y.dim == 2 {
		for i := 2; i < 5; i++ {
			info[7*i] = 0
		}
	}
	for k := 1; k < poses; k++ {
		d := r.real[k-1].Between(r.real[k])
		z := d.Plus(y.noise(linkM, linkRad))
		r.g.Values.Poses = append(r.g.Values.Poses, r.g.Values.Poses[k-1].Mul(z))
		r.links.Add(int32(k-1), int32(k), z, &info)
	}
	r.sights = r.g.AddSightings(posegraph.RangeBearing)
	return r
}

// sight is what a pose sees of a place, with its noise.
func (y *yard) sight(x lie.SE3, p [3]float64) (z [3]float64) {
	q := x.Inv().Apply(p)
	flat := math.Hypot(q[0], q[1])
	z = [3]float64{math.Hypot(flat, q[2]) + sightM*y.rng.NormFloat64(), math.Remainder(math.Atan2(q[1], q[0])+sightRad*y.rng.NormFloat64(), 2*math.Pi)}
	if y.dim == 3 {
		z[2] = math.Atan2(q[2], flat) + sightRad*y.rng.NormFloat64()
	}
	return z
}

const (
	sightM   = 0.05
	sightRad = 0.01
)

func (y *yard) sightInfo() (m lie.Mat3) {
	m = lie.Mat3{1 / (sightM * sightM), 0, 0, 0, 1 / (sightRad * sightRad)}
	if y.dim == 3 {
		m[8] = m[4]
	}
	return m
}

// upright turns the map of a robot so that z points up, but for an error of its first pose, and lets it know.
func (r *walker) upright() {
	first := r.real[0].Mul(lie.SE3{R: lie.ExpSO3([3]float64{levelRad * r.y.rng.NormFloat64(), levelRad * r.y.rng.NormFloat64(), 0})})
	turn := lie.SE3{R: lie.ExpSO3([3]float64{0, 0, 2 * r.y.rng.NormFloat64()}), T: [3]float64{5, 9, 2}}
	move := turn.Mul(first).Mul(r.g.Values.Poses[0].Inv())
	for k, x := range r.g.Values.Poses {
		r.g.Values.Poses[k] = move.Mul(x)
	}
	m := &r.g.Values.Poses[0].R
	r.up = &[3]float64{m[6], m[7], m[8]}
}

// look lets a robot see the marks around it now and then, under the names that call gives.
func (r *walker) look(call func(mark int) string) {
	info := r.y.sightInfo()
	for k, x := range r.real {
		for m, p := range r.y.marks {
			d := x.Inv().Apply(p)
			if k%4 != m%4 || math.Hypot(d[0], d[1]) > sensorRange || math.Hypot(d[0], d[1]) < 1 {
				continue
			}
			name := call(m)
			at := slices.Index(r.seen, name)
			if at < 0 {
				at = len(r.seen)
				r.seen = append(r.seen, name)
				r.g.Values.Points = append(r.g.Values.Points, [3]float64{})
			}
			r.sights.Add(int32(k), int32(at), lie.Identity(), [3]float64{}, r.y.sight(x, p), &info)
		}
	}
	posegraph.PlacePoints(r.g)
}

// encounter lets a see b at one moment by a sense, or takes who for b.
func (y *yard) encounter(a, b, who *walker, k int, sense msgs.Sense) *msgs.Tie {
	y.number++
	a.ends[k], b.ends[k] = true, true
	z := y.sight(a.real[k], who.real[k].T)
	info := y.sightInfo()
	s := &msgs.Sight{Sense: sense, Value: z, Info: info, Mount: msgs.Pose{Q: [4]float64{3: 1}}}
	switch sense {
	case msgs.Range:
		s.Value, s.Info = [3]float64{z[0]}, [9]float64{info[0]}
	case msgs.Bearing:
		s.Value[0], s.Info[0] = 0, 0
	}
	t := &msgs.Tie{
		Header: header(a.name, 0), ID: fmt.Sprintf("e%d", y.number), Dim: 3 * (y.dim - 1), Sight: s,
		From: msgs.KeyRef{Robot: a.name, Session: 1, ID: int64(10 * k)}, To: msgs.KeyRef{Robot: b.name, Session: 1, ID: int64(10 * k)},
	}
	y.ties = append(y.ties, t)
	return t
}

// near lists the moments at which two robots are in sight of each other.
func (y *yard) near(a, b *walker) (moments []int) {
	for k := range min(len(a.real), len(b.real)) {
		d := a.real[k].Inv().Apply(b.real[k].T)
		if n := math.Hypot(d[0], d[1]); n < sensorRange && n > 1 {
			moments = append(moments, k)
		}
	}
	return moments
}

// optimise brings a robot's graph to its optimum with some variables held.
func (r *walker) optimise(t testing.TB, fixed []int32) {
	t.Helper()
	s, err := posegraph.NewSolver(r.g, fixed, sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-16
	s.Optimise(o)
}

// summarise condenses a robot's graph at its values.
func (r *walker) summarise(t testing.TB, b *base) {
	t.Helper()
	d := r.g.Dim
	var terms []partition.Quadratic
	for k := range r.links.Len() {
		q := partition.Quadratic{Nodes: []int32{r.links.I[k], r.links.J[k]}, H: make([]float64, 4*d*d), B: make([]float64, 2*d)}
		r.links.Quadratic(k, &r.g.Values, q.H, q.B)
		terms = append(terms, q)
	}
	for k := range r.sights.Len() {
		q := partition.Quadratic{Nodes: []int32{r.sights.From[k], r.g.Point(r.sights.To[k])}, H: make([]float64, (d+3)*(d+3)), B: make([]float64, d+3)}
		r.sights.Quadratic(k, &r.g.Values, q.H, q.B)
		terms = append(terms, q)
	}
	separators := []int32{0}
	for k := range r.real {
		if r.ends[k] {
			separators = append(separators, int32(k))
		}
	}
	for p, name := range r.seen {
		if slices.Contains(r.wanted, name) {
			separators = append(separators, r.g.Point(int32(p)))
		}
	}
	c, err := partition.CondensePoints(d, r.g.Values.Poses, r.g.Values.Points, terms, separators)
	if err != nil {
		t.Fatal(err)
	}
	r.version++
	part := msgs.Part{Session: 1, Keyframes: len(r.real), Cost: r.g.Cost()}
	if r.up != nil {
		part.Levels = []msgs.Level{{Node: 0, Up: *r.up, Sigma: levelRad}}
	}
	var points []int32
	for _, v := range c.Junctions {
		if int(v) < len(r.real) {
			x := r.g.Values.Poses[v]
			part.Junctions = append(part.Junctions, msgs.Junction{ID: 10 * int64(v), Pose: wirePose(&x, r.y.dim), TravelM: float64(v), StampNS: int64(v)})
		} else {
			points = append(points, v-int32(len(r.real)))
		}
	}
	slices.SortFunc(points, func(a, b int32) int {
		if r.seen[a] < r.seen[b] {
			return -1
		}
		return 1
	})
	for _, p := range points {
		part.Points = append(part.Points, msgs.Point{Mark: r.seen[p], At: r.g.Values.Points[p]})
	}
	for p, name := range r.seen {
		if !slices.Contains(points, int32(p)) {
			part.Seen = append(part.Seen, name)
		}
	}
	slices.Sort(part.Seen)
	for _, q := range c.Cliques {
		m := msgs.Clique{H: q.H, B: q.B}
		from := []int32{}
		for _, v := range q.Nodes {
			if int(v) < len(r.real) {
				at, _ := slices.BinarySearch(c.Junctions, v)
				m.Nodes = append(m.Nodes, at)
			} else {
				from = append(from, v)
				m.Points = append(m.Points, slices.Index(points, v-int32(len(r.real))))
			}
		}
		part.Cliques = append(part.Cliques, m)
	}
	b.hear(r.name, msgs.KindSummary, &msgs.Summary{Header: header(r.name, 0), Version: r.version, Dim: d, Parts: []msgs.Part{part}})
}

// follow puts junctions and points where a correction has them and lets the rest follow.
func (r *walker) follow(t testing.TB, m *msgs.Correction) {
	t.Helper()
	if len(m.Parts) == 0 || !m.Parts[0].Joined {
		return
	}
	p := &m.Parts[0]
	frame := lie.FromQuat(p.DatumFromSession.T, p.DatumFromSession.Q)
	for v, x := range r.g.Values.Poses { // the map in the datum
		r.g.Values.Poses[v] = frame.Mul(x)
	}
	for v, x := range r.g.Values.Points {
		r.g.Values.Points[v] = frame.Apply(x)
	}
	var fixed []int32
	for k, id := range p.IDs {
		r.g.Values.Poses[id/10] = lie.FromQuat(p.Poses[k].T, p.Poses[k].Q)
		fixed = append(fixed, int32(id/10))
	}
	for _, q := range p.Points {
		k := slices.Index(r.seen, q.Mark)
		r.g.Values.Points[k] = q.At
		fixed = append(fixed, r.g.Point(int32(k)))
	}
	r.optimise(t, fixed)
}

// exchange lets the robots tell, hear and follow for some rounds, and returns the last messages of the base.
func (y *yard) exchange(t testing.TB, b *base, rounds int) (out []Publish) {
	t.Helper()
	for _, r := range y.robots {
		r.optimise(t, []int32{0})
	}
	for _, m := range y.ties {
		b.number[m.Header.Robot]++
		m.Header.Number = b.number[m.Header.Robot]
		b.hear(m.Header.Robot, msgs.KindTie, m)
	}
	for range rounds {
		for _, r := range y.robots {
			r.summarise(t, b)
			b.version[r.name] = r.version
			b.beat(r.name, nil)
		}
		out = b.tick(31)
		for _, r := range y.robots {
			if all := of(out, r.name, msgs.KindWant); len(all) > 0 {
				w, err := msgs.DecodeWant(all[len(all)-1])
				if err != nil {
					t.Fatal(err)
				}
				r.wanted = w.Marks
			}
			r.follow(t, correction(t, out, r.name))
		}
	}
	return out
}

// whole is everything in one piece, at the values of the robots in the datum: those of the marks are the means.
func (y *yard) whole(b *base) (*posegraph.Graph, []int32) {
	g := posegraph.New(3*(y.dim-1), nil)
	links, sights := g.AddBetween(), g.AddSightings(posegraph.RangeBearing)
	first := map[string]int32{}
	number := map[string]int32{}
	var count []float64
	for _, r := range y.robots {
		first[r.name] = int32(len(g.Values.Poses))
		g.Values.Poses = append(g.Values.Poses, r.g.Values.Poses...)
		for p, name := range r.seen {
			k, ok := number[name]
			if !ok {
				k = int32(len(count))
				number[name] = k
				g.Values.Points, count = append(g.Values.Points, [3]float64{}), append(count, 0)
			}
			for i, v := range r.g.Values.Points[p] {
				g.Values.Points[k][i] += v
			}
			count[k]++
		}
	}
	for k := range count {
		for i := range 3 {
			g.Values.Points[k][i] /= count[k]
		}
	}
	for _, r := range y.robots {
		o := first[r.name]
		for k := range r.links.Len() {
			var info [36]float64
			m := widen(r.links.Info(k), y.dim)
			info = m
			links.Add(o+r.links.I[k], o+r.links.J[k], r.links.Z[k], &info)
		}
		for k := range r.sights.Len() {
			sights.Add(o+r.sights.From[k], number[r.seen[r.sights.To[k]]], r.sights.Mount[k], [3]float64{}, r.sights.Z[k], r.sights.Info(k))
		}
	}
	var sets [5]*posegraph.Sightings
	for i, f := range b.Findings() {
		m := b.order[i].msg
		if f.Verdict != msgs.Held || m.Sight == nil {
			continue
		}
		s := senses[m.Sight.Sense]
		if sets[s] == nil {
			sets[s] = g.AddEncounters(s)
		}
		info := lie.Mat3(m.Sight.Info)
		sets[s].Add(first[m.From.Robot]+int32(m.From.ID/10), first[m.To.Robot]+int32(m.To.ID/10), lie.Identity(), [3]float64{}, m.Sight.Value, &info)
	}
	for _, r := range y.robots {
		if r.up != nil {
			g.AddLevels().Add(first[r.name], *r.up, levelRad)
		}
	}
	priors := g.AddPointPriors()
	for i := range b.cfg.Marks {
		m := &b.cfg.Marks[i]
		if k, ok := number[m.Name]; ok && m.Role == Control {
			info := m.info(y.dim)
			priors.Add(k, m.At, &info)
		}
	}
	return g, g.Anchors()
}

// gap is how much more the fleet's map costs than the optimum in one piece, relative.
func (y *yard) gap(t testing.TB, b *base) float64 {
	t.Helper()
	g, anchors := y.whole(b)
	cost := g.Cost()
	s, err := posegraph.NewSolver(g, anchors, sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-16
	res := s.Optimise(o)
	t.Logf("cost %.9f, in one piece %.9f", cost, res.Cost)
	return cost/res.Cost - 1
}

// joined counts the robots in the first robot's datum.
func joined(b *base) (n int) {
	for _, p := range b.Map() {
		if p.Joined {
			n++
		}
	}
	return n
}

func own(m int) string { return fmt.Sprintf("m%02d", m) }

// TestMarksJoin: robots that have nothing in common but marks come to the map of the adjustment in one piece.
func TestMarksJoin(t *testing.T) {
	for _, dim := range []int{2, 3} {
		for seed := range uint64(3) {
			y := newYard(dim, 3, 70, 24, seed)
			for _, r := range y.robots {
				r.look(own)
			}
			b := newBase(t, dim, func(c *Config) { c.HoldAll = seed == 0 })
			y.exchange(t, b, 8)
			if n := joined(b); n != 3 {
				t.Fatalf("dimension %d, seed %d: %d robots joined", dim, seed, n)
			}
			if gap := y.gap(t, b); !(math.Abs(gap) <= 1e-9) {
				t.Errorf("dimension %d, seed %d: gap %g", dim, seed, gap)
			}
		}
	}
}

// TestSightingsJoin: robots that have seen each other, with range and bearing, ranges and bearings alone.
func TestSightingsJoin(t *testing.T) {
	for _, dim := range []int{2, 3} {
		for _, seed := range []uint64{0, 1, 3} { // in 2 one robot meets the others once
			y := newYard(dim, 3, 200, 12, seed)
			for _, r := range y.robots { // marks that only itself knows
				r.look(func(m int) string { return r.name + own(m) })
			}
			for i, a := range y.robots {
				for j, o := range y.robots {
					if i == j {
						continue
					}
					for n, k := range y.near(a, o) {
						if n%4 == 0 {
							y.encounter(a, o, o, k, []msgs.Sense{msgs.RangeBearing, msgs.RangeBearing, msgs.Range, msgs.Bearing}[n/4%4])
						}
					}
				}
			}
			b := newBase(t, dim, func(c *Config) { c.HoldAll = false })
			y.exchange(t, b, 8)
			held := 0
			for _, f := range b.Findings() {
				if f.Verdict == msgs.Held {
					held++
				}
			}
			if n := joined(b); n != 3 || held < len(y.ties)*95/100 {
				f := b.Findings()[0]
				t.Logf("%s %s %v %s", f.From.Robot, f.To.Robot, f.Verdict, f.Reason)
				t.Fatalf("dimension %d, seed %d: %d robots joined, %d of %d ties held", dim, seed, n, held, len(y.ties))
			}
			if gap := y.gap(t, b); !(math.Abs(gap) <= 1e-9) {
				t.Errorf("dimension %d, seed %d: gap %g", dim, seed, gap)
			}
		}
	}
}

// TestLevelMapsJoin: three robots that know the vertical, of which two share three marks with the next, come to one level map, that of
// the adjustment in one piece.
func TestLevelMapsJoin(t *testing.T) {
	for seed := range uint64(3) {
		y := newYard(3, 3, 70, 24, seed)
		for _, r := range y.robots {
			r.upright()
			r.look(own)
		}
		b := newBase(t, 3, func(c *Config) { c.HoldAll = false })
		y.exchange(t, b, 8)
		if n := joined(b); n != 3 {
			t.Fatalf("seed %d: %d robots joined", seed, n)
		}
		if gap := y.gap(t, b); !(math.Abs(gap) <= 1e-9) {
			t.Errorf("seed %d: gap %g", seed, gap)
		}
		for i, p := range b.Map() {
			if tilt := math.Acos(p.DatumFromSession.R[8]); !(tilt < 5*levelRad) {
				t.Errorf("seed %d: the frame of robot %d is tilted by %.3f", seed, i+1, tilt)
			}
		}
	}
}

// off is how far the poses of a robot's map in the datum are from the truth, at most.
func (r *walker) off() (worst float64) {
	for k, x := range r.real {
		worst = math.Max(worst, math.Sqrt(squared(x.T, r.g.Values.Poses[k].T)))
	}
	return worst
}

// TestControlMarksHoldTheDatum: with the least number of control marks, or more, the map stands in their coordinates, robots that
// share nothing else too; check marks come out where they are and have no say.
func TestControlMarksHoldTheDatum(t *testing.T) {
	for _, dim := range []int{2, 3} {
		for _, controls := range []int{dim, 6} {
			for _, shared := range []bool{true, false} {
				y := newYard(dim, 3, 70, 24, 5)
				for _, r := range y.robots {
					r.look(func(m int) string {
						if shared || m < controls {
							return own(m)
						}
						return r.name + own(m)
					})
				}
				b := newBase(t, dim, func(c *Config) {
					c.HoldAll = false
					for m := range 10 {
						k := Mark{Name: own(m), Role: Check, At: y.marks[m], Sigma: [3]float64{0.01, 0.01, 0.01}}
						if m < controls {
							k.Role = Control
						} else if m < 8 {
							continue
						} else {
							k.At[0] += 3 // to show that it does not matter
						}
						c.Marks = append(c.Marks, k)
					}
				})
				y.exchange(t, b, 8)
				for _, p := range b.Map() {
					if p.Island != "control" {
						t.Fatalf("dimension %d, %d control marks, shared %v: %s in the datum %q", dim, controls, shared, p.Robot, p.Island)
					}
				}
				for _, r := range y.robots {
					if off := r.off(); !(off < 1.5) {
						t.Errorf("dimension %d, %d control marks, shared %v: %s is off by %.2f m", dim, controls, shared, r.name, off)
					}
				}
				if gap := y.gap(t, b); !(math.Abs(gap) <= 1e-9) {
					t.Errorf("dimension %d, %d control marks, shared %v: gap %g", dim, controls, shared, gap)
				}
				marks, err := b.Marks()
				if err != nil {
					t.Fatal(err)
				}
				checks := 0
				for _, m := range marks {
					if m.Role == Check && shared {
						checks++
						if dx := m.Known[0] - m.At[0]; !(math.Abs(dx-3) < 0.5) || !(m.Cov[0] > 0 && m.Cov[0] < 0.1) {
							t.Errorf("dimension %d: check mark %s came out %.2f m off the coordinate that is 3 m wrong, variance %g", dim, m.Mark, dx, m.Cov[0])
						}
					}
				}
				if shared && checks != 2 {
					t.Errorf("%d check marks", checks)
				}
			}
		}
	}
}

// TestWrongRobot: whole meetings with another robot than was thought join nothing; among true ones they are refused.
func TestWrongRobot(t *testing.T) {
	for _, dim := range []int{2, 3} {
		for n := 2; n <= 6; n += 2 {
			for seed := range uint64(3) {
				y := newYard(dim, n+1, 120, 12, seed)
				for _, r := range y.robots {
					r.look(func(m int) string { return r.name + own(m) })
				}
				for i, a := range y.robots[:n] {
					who := y.robots[(i+1+y.rng.IntN(n))%(n+1)]
					o := y.robots[(i+1)%n]
					if o == who {
						who = y.robots[n]
					}
					for _, k := range y.near(a, who) {
						y.encounter(a, o, who, k, msgs.RangeBearing)
					}
				}
				b := newBase(t, dim, func(c *Config) { c.HoldAll = false })
				y.exchange(t, b, 3)
				if k := joined(b); k > 0 {
					t.Errorf("dimension %d, %d robots, seed %d: %d joined", dim, n, seed, k)
				}
				for _, f := range b.Findings() {
					if f.Verdict != msgs.Open || f.Reason == "" {
						t.Errorf("dimension %d, %d robots, seed %d: %v, %s", dim, n, seed, f.Verdict, f.Reason)
					}
				}
			}
		}
	}
}

// TestRangesAmongJoined: a range and a bearing join nothing by themselves; once marks have, the true ones are held, the false refused.
func TestRangesAmongJoined(t *testing.T) {
	for _, dim := range []int{2, 3} {
		for _, marked := range []bool{false, true} {
			y := newYard(dim, 2, 100, 24, 2)
			for _, r := range y.robots {
				r.look(func(m int) string {
					if marked {
						return own(m)
					}
					return r.name + own(m)
				})
			}
			a, o := y.robots[0], y.robots[1]
			near := y.near(a, o)
			if len(near) < 4 {
				t.Fatalf("%d meetings", len(near))
			}
			y.encounter(a, o, o, near[0], msgs.Range)
			y.encounter(o, a, a, near[1], msgs.Bearing)
			false1 := y.encounter(a, o, o, near[2], msgs.Range)
			false1.Sight.Value[0] += 5
			false2 := y.encounter(o, a, a, near[3], msgs.Bearing)
			false2.Sight.Value[1] = math.Remainder(false2.Sight.Value[1]+1, 2*math.Pi)
			b := newBase(t, dim, func(c *Config) { c.HoldAll = false })
			y.exchange(t, b, 4)
			for i, f := range b.Findings() { // of each robot first the true one
				expected := []msgs.VerdictKind{msgs.Held, msgs.Refused}[b.order[i].msg.Header.Number-1]
				if !marked {
					expected = msgs.Open
				}
				if f.Verdict != expected {
					t.Errorf("dimension %d, marks %v: tie %d is %v: %s", dim, marked, i, f.Verdict, f.Reason)
				}
				if marked && (f.Limit < 10 || f.Statistic == 0 || f.DoF != b.order[i].sight.dof) {
					t.Errorf("evidence %+v", f.Evidence)
				}
			}
		}
	}
}

// TestRefusedSessionKeepsItsMarks: a robot that a person has ruled out joins nobody by its marks.
func TestRefusedSessionKeepsItsMarks(t *testing.T) {
	y := newYard(2, 3, 70, 24, 1)
	for _, r := range y.robots {
		r.look(own)
	}
	b := newBase(t, 2, func(c *Config) { c.HoldAll = false })
	if err := b.Rule(1, msgs.Ruling{Fleet: "fleet", Target: msgs.OnRobot, Robot: "r2", Verdict: msgs.Refused, By: "lead", Note: "wet lens"}); err != nil {
		t.Fatal(err)
	}
	y.exchange(t, b, 3)
	for _, p := range b.Map() {
		if p.Joined != (p.Robot != "r2") {
			t.Errorf("%s joined: %v", p.Robot, p.Joined)
		}
	}
}
