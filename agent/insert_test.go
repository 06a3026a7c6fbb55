package agent

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

var ranged = Sight{Sense: posegraph.RangeBearing, Value: [3]float64{5, 0.3}, Info: lie.Mat3{400, 0, 0, 0, 2500, 0, 0, 0, 2500}, Mount: lie.Identity()}

func at(session uint32, stamp int64) msgs.KeyRef {
	return msgs.KeyRef{Robot: "r1", Session: session, ByStamp: true, StampNS: stamp}
}

// straight drives n keyframes, a second and a metre apart, from a moment on; between is called after each, before the odometry to it.
func (r *robot) straight(session uint32, n int, between func(k int)) {
	r.t.Helper()
	began := r.now
	for k := range n {
		r.now = began + int64(k)*second
		x := lie.Identity()
		x.T[0] = float64(k)
		r.do(Keyframe{Session: session, ID: int64(k), StampNS: r.now, Pose: x})
		between(k)
		if k > 0 {
			z := lie.Identity()
			z.T[0] = 1
			r.do(Relative{Session: session, From: int64(k - 1), To: int64(k), Z: z, Info: sigmas(0.1, 0.02)})
		}
	}
}

// TestMomentsAhead: what is seen after the newest keyframe, or before the odometry has come, is taken at once; the record goes out by
// its stamp, and the map is in the end the one of an agent that was told when all was there.
func TestMomentsAhead(t *testing.T) {
	other := msgs.KeyRef{Robot: "r2", Session: 1, ID: 7}
	early, late := newRobot(t, 2), newRobot(t, 2)
	tell := func(r *robot, k int) {
		stamp := int64(k)*second + second/4
		out := r.do(Tie{From: at(1, stamp), To: other, Sight: &ranged})
		if m, err := msgs.DecodeTie(out[0].Payload); err != nil || !m.From.ByStamp || m.From.StampNS != stamp || m.Sight == nil || m.Sight.Sense != msgs.RangeBearing {
			t.Fatalf("tie %+v, %v", m, err)
		}
		r.do(Sighting{Session: 1, ByStamp: true, StampNS: stamp + 1, Mark: "m", Sight: ranged})
	}
	early.straight(1, 10, func(k int) {
		if k%3 == 1 {
			tell(early, k)
		}
		if n := len(early.sessions[0].awaiting); n > 2 {
			t.Errorf("%d moments are awaited at keyframe %d", n, k)
		}
	})
	late.straight(1, 10, func(int) {})
	for k := range 9 {
		if k%3 == 1 {
			tell(late, k)
		}
	}
	a, b := summary(t, early.tick(1)), summary(t, late.tick(1))
	for _, s := range []*msgs.Summary{a, b} {
		var stamps []int64
		for _, j := range s.Parts[0].Junctions {
			if len(j.Resolved) == 1 && j.Resolved[0] == j.StampNS && j.ID == -j.StampNS {
				stamps = append(stamps, j.StampNS)
			}
		}
		slices.Sort(stamps)
		if !slices.Equal(stamps, []int64{second * 5 / 4, second * 17 / 4, second * 29 / 4}) {
			t.Errorf("junctions answer %v", stamps)
		}
	}
	// The keyframes came in another order; the poses are the same.
	x, y := early.Tracks()[0], late.Tracks()[0]
	for k, id := range x.IDs {
		if v := slices.Index(y.IDs, id); v < 0 || apart(x.Poses[k:k+1], y.Poses[v:v+1]) > 1e-9 {
			t.Errorf("keyframe %d differs", id)
		}
	}
	if len(x.IDs) != 16 || len(y.IDs) != 16 || len(x.Marks) != 1 {
		t.Errorf("%d and %d keyframes, marks %v", len(x.IDs), len(y.IDs), x.Marks)
	}
}

// TestMomentsNeverReached: a moment that no odometry reaches keeps nothing from going on.
func TestMomentsNeverReached(t *testing.T) {
	r := newRobot(t, 2)
	r.straight(1, 4, func(k int) {
		if k == 2 {
			for _, stamp := range []int64{second + 1, 100 * second, math.MaxInt64} {
				r.do(Sighting{Session: 1, ByStamp: true, StampNS: stamp, Mark: "m", Sight: ranged})
				r.do(Tie{From: at(1, stamp), To: msgs.KeyRef{Robot: "r2", Session: 1, ID: 7}, Sight: &ranged})
			}
		}
	})
	r.do(Keyframe{Session: 1, ID: 50, StampNS: 200 * second, Pose: lie.Identity()}) // no odometry to it
	if s := summary(t, r.tick(1)); len(s.Parts) != 1 || s.Parts[0].Keyframes != 6 {
		t.Errorf("parts %+v", s.Parts)
	}
	open := 0
	for _, e := range r.Sightings() {
		if e.Verdict == msgs.Open {
			open++
		}
	}
	if open != 2 || len(r.sessions[0].awaiting) != 4 {
		t.Errorf("%d sightings open, %d moments awaited", open, len(r.sessions[0].awaiting))
	}
}

// TestMomentsAgainstScan: a moment is resolved to what a search through all keyframes finds.
func TestMomentsAgainstScan(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	for range 50 {
		r := newRobot(t, 2)
		var stamps []int64
		n := 2 + rng.IntN(20)
		for k := range n {
			stamps = append(stamps, rng.Int64N(40))
			r.do(Keyframe{Session: 1, ID: int64(k), StampNS: stamps[k], Pose: lie.Identity()})
		}
		s := r.sessions[0]
		for stamp := int64(-1); stamp <= 41; stamp++ {
			want := int32(slices.Index(stamps, stamp)) // there is no odometry: only what is there is found
			if v, known := s.resolve(stamp); known != (want >= 0) || known && v != want {
				t.Fatalf("stamp %d among %v: variable %d, %v, want %d", stamp, stamps, v, known, want)
			}
		}
	}
}

// TestFarStamps: the difference of stamps may be no number.
func TestFarStamps(t *testing.T) {
	r := newRobot(t, 2)
	for k, stamp := range []int64{math.MinInt64, math.MaxInt64} {
		r.do(Keyframe{Session: 1, ID: int64(k), StampNS: stamp, Pose: lie.Identity()})
	}
	r.do(Relative{Session: 1, From: 0, To: 1, Z: lie.Identity(), Info: sigmas(1, 1)})
	r.do(Sighting{Session: 1, ByStamp: true, StampNS: 3, Mark: "m", Sight: ranged})
	if n := len(r.Tracks()[0].IDs); n != 2 {
		t.Errorf("%d keyframes", n)
	}
}

// TestMarksOfSessions: a front end that begins anew sees the same marks in another frame; each session tells them for itself, and only a
// mark that the base asks for becomes a point.
func TestMarksOfSessions(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 25, 1)
	r.glance(1, 2, 8, "b", lie.Identity())
	r.glance(1, 4, 9, "a", lie.Identity())
	r.now += 100 * second
	r.walk(2, 0, 25, 2)
	r.glance(2, 3, 8, "b", lie.Identity())
	s := summary(t, r.tick(30))
	if len(s.Parts) != 2 || !slices.Equal(s.Parts[0].Seen, []string{"a", "b"}) || !slices.Equal(s.Parts[1].Seen, []string{"b"}) || len(s.Parts[0].Cliques) > 0 {
		t.Fatalf("parts %+v", s.Parts)
	}
	for _, p := range kinds(r.tick(300), msgs.KindSummary) { // again, for nobody answers
		if p.Number != s.Version {
			t.Errorf("summary %d with nothing new", p.Number)
		}
	}
	r.want(func(w *msgs.Want) { w.Marks = []string{"b", "nowhere"} })
	s = summary(t, r.tick(30))
	for i, seen := range [][]string{{"a"}, nil} {
		p := &s.Parts[i]
		if len(p.Points) != 1 || p.Points[0].Mark != "b" || !slices.Equal(p.Seen, seen) || i == 0 && len(p.Cliques) > 0 && len(p.Cliques[0].Points) == 0 {
			t.Errorf("part %+v", p)
		}
	}
	if again := r.want(func(w *msgs.Want) { w.Marks = []string{"b"} }); len(again) > 0 || len(kinds(r.tick(30), msgs.KindSummary)) > 0 {
		t.Errorf("a mark asked for again is told again")
	}
	r.correct(bent(r.Agent, r.version, 1))
	c := bent(r.Agent, r.version, 2)
	if err := r.correct(c); err != nil {
		t.Fatal(err)
	}
	for i, track := range r.Tracks() {
		want := c.Parts[i].Points[0]
		for _, m := range track.Marks {
			got := track.DatumFromSession.Apply(m.Place)
			if d := math.Hypot(math.Hypot(got[0]-want.At[0], got[1]-want.At[1]), got[2]-want.At[2]); m.Name == "b" && d > 1e-9 {
				t.Errorf("session %d: mark b is off by %g m", track.Session, d)
			}
		}
	}
}

// TestLevel: a front end that knows the vertical tells it with the first keyframe of each session that is tied to others; the robot's own map
// does not change by it.
func TestLevel(t *testing.T) {
	for _, dim := range []int{2, 3} {
		cfg := DefaultConfig("fleet", "r1", dim)
		cfg.Level, cfg.Journal = 0.01, msgs.JournalID{9}
		r := &robot{Agent: New(cfg), t: t}
		tilted := lie.Exp(lie.Tangent{0, 0, 0, 0.3, -0.2, 1})
		if dim == 2 {
			tilted = lie.Identity()
		}
		r.do(Keyframe{Session: 1, ID: 3, StampNS: 1, Pose: tilted})
		r.do(Keyframe{Session: 1, ID: 4, StampNS: 2, Pose: tilted})
		r.do(Relative{Session: 1, From: 3, To: 4, Z: lie.Identity(), Info: sigmas(0.1, 0.1)})
		if out := r.tick(40); len(kinds(out, msgs.KindSummary)) > 0 {
			t.Fatalf("a summary without separators")
		}
		r.see(1, 4)
		s := summary(t, r.tick(1))
		p := &s.Parts[0]
		if dim == 2 {
			if len(p.Levels) > 0 || len(p.Junctions) != 1 {
				t.Errorf("in the plane: %+v", p)
			}
			continue
		}
		up := tilted.Inv().R.Apply([3]float64{0, 0, 1})
		l := p.Levels
		if !equal(ids(p), []int64{3, 4}) || len(l) != 1 || l[0].Node != 0 || l[0].Sigma != 0.01 ||
			math.Abs(l[0].Up[0]-up[0])+math.Abs(l[0].Up[1]-up[1])+math.Abs(l[0].Up[2]-up[2]) > 1e-9 {
			t.Errorf("junctions %v, levels %+v, want up %v", ids(p), l, up)
		}
		if d := r.sessions[0].told.condensed.NullResidual(r.sessions[0].told.at.Poses); d > 1e-9 {
			t.Errorf("the summary is not indifferent to the frame: %g", d)
		}
	}
}

// Ten times the moments must not take a hundred times as long.
func BenchmarkMoments(b *testing.B) {
	for _, n := range []int{300, 3000} {
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			for range b.N {
				r := newRobot(b, 2)
				r.straight(1, n, func(k int) {
					for i := range int64(5) {
						r.do(Sighting{Session: 1, ByStamp: true, StampNS: r.now + i*second/5, Mark: "m", Sight: ranged})
					}
				})
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(5*n*b.N), "ns/sighting")
		})
	}
}
