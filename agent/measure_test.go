package agent

import (
	"bytes"
	"math"
	"strings"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// TestRefusedEventsLeaveNoTrace gives an agent events it must refuse, and compares it after each with a twin that never saw them:
// what it shows and, a minute later, what it has published.
func TestRefusedEventsLeaveNoTrace(t *testing.T) {
	far := lie.Identity()
	far.T[0] = 2 * farthest
	nan := lie.Identity()
	nan.R[4] = math.NaN()
	mirrored := lie.Identity()
	mirrored.R[8] = -1
	scaled := lie.Identity()
	scaled.R[0] = 1.001
	info := sigmas(0.1, 0.1)
	indefinite, crooked, negative, blind := info, info, info, [36]float64{}
	indefinite[1], indefinite[6] = 101, 101
	crooked[1] = 3
	negative[35] = -1
	blind[0], blind[1], blind[6] = 1, 1, 1
	own := func(session uint32, id int64) msgs.KeyRef { return msgs.KeyRef{Robot: "r1", Session: session, ID: id} }
	other := msgs.KeyRef{Robot: "r2", Session: 1, ID: 7}
	tie := func(from, to msgs.KeyRef, z lie.SE3, info [36]float64) Tie {
		return Tie{ID: "t", From: from, To: to, Z: z, Info: info}
	}
	relative := func(from, to int64, z lie.SE3, info [36]float64) Relative {
		return Relative{Session: 1, From: from, To: to, Z: z, Info: info}
	}
	ranged := Sight{Sense: posegraph.Range, Value: [3]float64{5}, Info: lie.Mat3{1}, Mount: lie.Identity()}
	sighting := func(spoil func(s *Sight)) Sighting {
		e := Sighting{Session: 1, ID: 1, Mark: "m", Sight: ranged}
		spoil(&e.Sight)
		return e
	}
	for _, c := range []struct {
		name string
		e    Event
		says string
	}{
		{"keyframe twice", Keyframe{Session: 1, ID: 3, Pose: lie.Identity()}, "keyframe 3 of session 1"},
		{"keyframe far away in a session of its own", Keyframe{Session: 5, ID: 3, Pose: far}, "keyframe 3 of session 5"},
		{"keyframe that is no number", Keyframe{Session: 1, ID: 99, Pose: nan}, "keyframe 99 of session 1"},
		{"mirrored keyframe", Keyframe{Session: 1, ID: 99, Pose: mirrored}, "keyframe 99 of session 1"},
		{"scaled keyframe", Keyframe{Session: 1, ID: 99, Pose: scaled}, "keyframe 99 of session 1"},
		{"measurement from an unknown keyframe", relative(1, 99, lie.Identity(), info), "from 1 to 99 of session 1"},
		{"measurement of itself", relative(1, 1, lie.Identity(), info), "from 1 to 1 of session 1"},
		{"measurement in an unknown session", Relative{Session: 5, From: 1, To: 2, Z: lie.Identity(), Info: info}, "session 5"},
		{"measurement that is no number", relative(1, 2, nan, info), "from 1 to 2 of session 1"},
		{"indefinite information", relative(1, 2, lie.Identity(), indefinite), "semidefinite"},
		{"crooked information", relative(1, 2, lie.Identity(), crooked), "from 1 to 2 of session 1"},
		{"negative information", relative(1, 2, lie.Identity(), negative), "from 1 to 2 of session 1"},
		{"information beside nothing", relative(1, 2, lie.Identity(), blind), "from 1 to 2 of session 1"},
		{"tie from an unknown keyframe", tie(own(1, 99), other, lie.Identity(), info), "keyframe 99 of session 1"},
		{"tie from an unknown session", tie(own(5, 1), other, lie.Identity(), info), "session 5"},
		{"tie of strangers", tie(other, msgs.KeyRef{Robot: "r3", Session: 1}, lie.Identity(), info), "neither is r1"},
		{"tie to itself", tie(own(1, 3), own(1, 3), lie.Identity(), info), "t"},
		{"tie that is no number", tie(own(1, 3), other, nan, info), "t"},
		{"tie with indefinite information", tie(own(1, 3), other, lie.Identity(), indefinite), "semidefinite"},
		{"tie to no name", tie(own(1, 3), msgs.KeyRef{Robot: "a b"}, lie.Identity(), info), "t"},
		{"tie with a sight that is no number", Tie{ID: "t", From: own(1, 3), To: other, Sight: &Sight{Sense: posegraph.Range, Value: [3]float64{math.NaN()}, Info: lie.Mat3{1}, Mount: lie.Identity()}}, "t"},
		{"tie at a moment before the track", Tie{ID: "t", From: msgs.KeyRef{Robot: "r1", Session: 1, ByStamp: true, StampNS: -5}, To: other, Sight: &ranged}, "before the first keyframe"},
		{"tie at a moment of an unknown session", Tie{ID: "t", From: msgs.KeyRef{Robot: "r1", Session: 5, ByStamp: true, StampNS: 3}, To: other, Sight: &ranged}, "session 5"},
		{"sighting in an unknown session", Sighting{Session: 5, ID: 1, Mark: "m", Sight: ranged}, "session 5"},
		{"sighting from an unknown keyframe", Sighting{Session: 1, ID: 99, Mark: "m", Sight: ranged}, "keyframe 99"},
		{"sighting before the track", Sighting{Session: 1, ByStamp: true, StampNS: math.MinInt64, Mark: "m", Sight: ranged}, "before the first keyframe"},
		{"sighting of no mark", Sighting{Session: 1, ID: 1, Sight: ranged}, "mark"},
		{"sighting of a mark with a long name", Sighting{Session: 1, ID: 1, Mark: strings.Repeat("m", 129), Sight: ranged}, "mark"},
		{"sighting of a mark with a space", Sighting{Session: 1, ID: 1, Mark: "a b", Sight: ranged}, "mark"},
		{"sighting without a sense", sighting(func(s *Sight) { s.Sense = 0 }), "sense 0"},
		{"sighting by an unknown sense", sighting(func(s *Sight) { s.Sense = 5 }), "sense 5"},
		{"sighting that measures nothing", sighting(func(s *Sight) { s.Info = lie.Mat3{4: 1} }), "nothing is measured"},
		{"sighting that is no number", sighting(func(s *Sight) { s.Value[0] = math.NaN() }), "mark \"m\""},
		{"sighting of infinite range", sighting(func(s *Sight) { s.Value[0] = math.Inf(1) }), "mark \"m\""},
		{"sighting of negative range", sighting(func(s *Sight) { s.Value[0] = -1 }), "range -1"},
		{"sighting straight through the back", sighting(func(s *Sight) {
			s.Sense, s.Value, s.Info = posegraph.Bearing, [3]float64{0, 1, 2}, lie.Mat3{4: 1, 8: 1}
		}), "elevation 2"},
		{"sighting with information that is none", sighting(func(s *Sight) { s.Info[0] = math.Inf(1) }), "information"},
		{"sighting with indefinite information", sighting(func(s *Sight) { s.Sense, s.Info = posegraph.Position, lie.Mat3{1, 2, 0, 2, 1} }), "semidefinite"},
		{"sighting by a crooked sensor", sighting(func(s *Sight) { s.Mount = scaled }), "mounting"},
		{"unknown kind of message", Message{Kind: "hb"}, "hb"},
		{"message that is none", Message{Kind: msgs.KindWant, Payload: []byte{1, 2, 3}}, ""},
	} {
		t.Run(c.name, func(t *testing.T) {
			a, twin := newRobot(t, 3), newRobot(t, 3)
			for _, r := range []*robot{a, twin} {
				r.walk(1, 0, 12, 1)
				r.see(1, 3)
				r.tick(8)
			}
			_, err := a.Handle(a.now, c.e)
			if err == nil || !strings.Contains(err.Error(), c.says) {
				t.Fatalf("error %v, want one about %q", err, c.says)
			}
			if x, y := fingerprint(a.Agent), fingerprint(twin.Agent); x != y {
				t.Errorf("now\n%s\nthe twin\n%s", x, y)
			}
			samePublished(t, a.tick(60), twin.tick(60))
		})
	}
}

func TestPlanarSurveyRefusesHeight(t *testing.T) {
	r := newRobot(t, 2)
	tilted := lie.Exp(lie.Tangent{0, 0, 0, 0.1, 0, 0})
	high := lie.Identity()
	high.T[2] = 1
	for _, x := range []lie.SE3{tilted, high} {
		if _, err := r.Handle(0, Keyframe{Session: 1, ID: 1, Pose: x}); err == nil {
			t.Errorf("%v was taken", x)
		}
	}
}

// samePublished compares what two agents published.
func samePublished(t *testing.T, got, want []Publish) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%d messages, want %d", len(got), len(want))
	}
	for i := range got {
		if got[i].Kind != want[i].Kind || got[i].Number != want[i].Number || !bytes.Equal(got[i].Payload, want[i].Payload) {
			t.Fatalf("message %d is a %s number %d, want a %s number %d, the same bytes", i, got[i].Kind, got[i].Number, want[i].Kind, want[i].Number)
		}
	}
}

// TestSameEventsSameBytes lets two agents live the same life.
func TestSameEventsSameBytes(t *testing.T) {
	for _, dim := range []int{2, 3} {
		a, b := newRobot(t, dim), newRobot(t, dim)
		samePublished(t, life(a), life(b))
	}
}

// life is ten minutes of an agent with everything in it.
func life(r *robot) (out []Publish) {
	r.walk(1, 0, 45, 1)
	r.glance(1, 3, 12, "a", lie.Identity())
	r.glance(1, 20, 30, "b", lie.Identity())
	out = append(out, r.see(1, 3)...)
	out = append(out, r.see(1, 40)...)
	out = append(out, r.tick(30)...)
	out = append(out, r.want(func(w *msgs.Want) {
		w.Keys = []msgs.KeyRef{{Robot: "r1", Session: 1, ID: 20}}
		w.Marks = []string{"b"}
		w.Safe = 1
	})...)
	r.walk(2, 100, 25, 2)
	out = append(out, r.see(2, 110)...)
	out = append(out, r.tick(100)...)
	r.correct(bent(r.Agent, r.version, 1))
	return append(out, r.tick(400)...)
}

// TestTies: numbers count from one, repeats come after 10, 20, 40, 80, 160, 160 s until the base holds the record.
func TestTies(t *testing.T) {
	r := newRobot(t, 3)
	r.walk(1, 0, 12, 1)
	for n := uint64(1); n <= 3; n++ {
		out := r.see(1, int64(n))
		if len(out) != 1 || out[0].Kind != msgs.KindTie || out[0].Number != n {
			t.Fatalf("tie %d published as %+v", n, out)
		}
		m, err := msgs.DecodeTie(out[0].Payload)
		if err != nil || m.Header.Number != n || m.From.ID != int64(n) || m.Header.Journal != r.cfg.Journal {
			t.Errorf("tie %d says %+v, %v", n, m, err)
		}
	}
	r.want(func(w *msgs.Want) { w.Safe = 1 })
	sent := map[uint64][]int64{}
	for r.now < 480*second {
		for _, p := range kinds(r.tick(1), msgs.KindTie) {
			sent[p.Number] = append(sent[p.Number], r.now/second)
			if p.Number == 2 && len(sent[2]) == 3 {
				r.want(func(w *msgs.Want) { w.Safe = 2 })
			}
		}
	}
	if len(sent[1]) > 0 || !equal(sent[2], []int64{10, 30, 70}) || !equal(sent[3], []int64{10, 30, 70, 150, 310, 470}) {
		t.Errorf("repeated at %v", sent)
	}
}

func equal(a, b []int64) bool {
	if len(a) != len(b) {
		return false
	}
	for i := range a {
		if a[i] != b[i] {
			return false
		}
	}
	return true
}

// TestTieWithinTheRobot: between two sessions of its own both ends become separators, also one that is named by its stamp.
func TestTieWithinTheRobot(t *testing.T) {
	r := newRobot(t, 2)
	r.walk(1, 0, 12, 1)
	r.now += 100 * second
	r.walk(2, 0, 12, 2)
	at := r.now + 4 // of keyframe 4 of session 2
	info := sigmas(0.1, 0.1)
	r.do(Tie{From: msgs.KeyRef{Robot: "r1", Session: 1, ID: 3}, To: msgs.KeyRef{Robot: "r1", Session: 2, ID: 9}, Z: lie.Identity(), Info: info})
	r.do(Tie{From: msgs.KeyRef{Robot: "r1", Session: 1, ID: 5}, To: msgs.KeyRef{Robot: "r1", Session: 2, ByStamp: true, StampNS: at}, Z: lie.Identity(), Info: info})
	s := summary(t, r.tick(1))
	if len(s.Parts) != 2 || !equal(ids(&s.Parts[0]), []int64{3, 5}) || !equal(ids(&s.Parts[1]), []int64{4, 9}) {
		t.Fatalf("parts %+v", s.Parts)
	}
	if j := s.Parts[1].Junctions[0]; len(j.Resolved) != 1 || j.Resolved[0] != at || j.StampNS != at {
		t.Errorf("keyframe 4 answers %v, want %d", j.Resolved, at)
	}
}

func ids(p *msgs.Part) (out []int64) {
	for i := range p.Junctions {
		out = append(out, p.Junctions[i].ID)
	}
	return out
}
