package agent

import (
	"math"
	"slices"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// TestStandingRobot: a robot that stands at one keyframe and measures marks ties others together by them.
func TestStandingRobot(t *testing.T) {
	r := newRobot(t, 3)
	r.do(Keyframe{Session: 1, ID: 3, StampNS: 5, Pose: lie.Identity()})
	places := map[string][3]float64{"a": {4, 1, 0.5}, "b": {-2, 6, 1}, "c": {0, -5, 2}}
	for _, name := range []string{"c", "a", "b"} {
		r.do(Sighting{Session: 1, ID: 3, Mark: name, Sight: Sight{
			Sense: posegraph.Position, Value: places[name], Info: lie.Mat3{100, 0, 0, 0, 100, 0, 0, 0, 25}, Mount: lie.Identity(),
		}})
	}
	r.tick(1)
	r.want(func(w *msgs.Want) { w.Marks = []string{"a", "c"} })
	p := summary(t, r.tick(60)).Parts[0]
	if len(p.Points) != 2 || p.Points[0].Mark != "a" || p.Points[1].Mark != "c" || !slices.Equal(p.Seen, []string{"b"}) || len(p.Junctions) != 1 {
		t.Fatalf("part %+v", p)
	}
	for _, q := range p.Points {
		if q.At != places[q.Mark] {
			t.Errorf("mark %s at %v", q.Mark, q.At)
		}
	}
	if len(p.Cliques) == 0 {
		t.Fatal("nothing is said of the marks")
	}
	for _, c := range p.Cliques { // position in the frame of the keyframe: the information is that of the sighting
		if n := len(c.B); len(c.Nodes) != 1 || math.Abs(c.H[0]-100) > 1e-4 || math.Abs(c.H[n*n-1]-25) > 1e-4 {
			t.Errorf("clique %+v", c)
		}
	}
}

// TestPartsOfASession: where relative poses do not hold a session together a mark does not either, be it seen from both parts; and when
// they come, it does.
func TestPartsOfASession(t *testing.T) {
	r := newRobot(t, 2)
	r.walk(1, 0, 10, 1)
	r.walk(1, 100, 10, 2)
	r.glance(1, 2, 5, "a", lie.Identity())
	r.glance(1, 102, 105, "a", lie.Identity())
	r.tick(1)
	count := func() (held, open int) {
		for _, e := range r.Sightings() {
			switch e.Verdict {
			case msgs.Held:
				held++
			case msgs.Open:
				open++
			}
		}
		return
	}
	if held, open := count(); held != 4 || open != 4 {
		t.Errorf("%d held, %d open", held, open)
	}
	s := r.sessions[0]
	z := s.front[s.index[2]].Between(s.front[s.index[102]]) // both parts begin at the origin, and saw the mark in one place
	r.do(Relative{Session: 1, From: 2, To: 102, Z: z, Info: sigmas(0.3, 0.1)})
	r.tick(60)
	if held, open := count(); held != 8 || open != 0 {
		t.Errorf("with a relative pose between the parts: %d held, %d open", held, open)
	}
}

// TestMarkWithoutPlace: bearings from one place, or too few ranges, leave a mark out until there are more.
func TestMarkWithoutPlace(t *testing.T) {
	r := newRobot(t, 2)
	r.straight(1, 12, func(int) {})
	see := func(id int64, sense posegraph.Sense, mark string, place [2]float64) {
		x, y := place[0]-float64(id), place[1]
		r.do(Sighting{Session: 1, ID: id, Mark: mark, Sight: Sight{Sense: sense, Value: [3]float64{math.Hypot(x, y), math.Atan2(y, x)}, Info: lie.Mat3{400, 0, 0, 0, 2500}, Mount: lie.Identity()}})
	}
	b, c := [2]float64{3, 5}, [2]float64{6, 4}
	see(1, posegraph.Bearing, "b", b)
	see(1, posegraph.Bearing, "b", b)
	see(2, posegraph.Range, "c", c)
	see(4, posegraph.Range, "c", c)
	see(9, posegraph.Range, "c", c) // in line: the other side would do as well
	r.tick(60)
	if m := r.Tracks()[0].Marks; len(m) != 0 {
		t.Fatalf("marks %v", m)
	}
	see(7, posegraph.Bearing, "b", b)
	see(7, posegraph.RangeBearing, "c", c)
	r.tick(60)
	m := r.Tracks()[0].Marks
	if len(m) != 2 || math.Hypot(m[0].Place[0]-3, m[0].Place[1]-5) > 1e-6 || math.Hypot(m[1].Place[0]-6, m[1].Place[1]-4) > 1e-6 {
		t.Errorf("marks %v", m)
	}
	for _, e := range r.Sightings() {
		if e.Verdict != msgs.Held {
			t.Errorf("mark %s from %d: %v, %s", e.Mark, e.ID, e.Verdict, e.Reason)
		}
	}
}
