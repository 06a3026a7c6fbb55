package evidence

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"selvage/internal/lie"
)

// The stories are told with robots that walk straight lines, 40 nodes 2.5 m apart, whose odometry is nearly perfect. b walks 4 m
// beside a, c 4 m beside b, and so on; each robot's frame is where it started.
type story struct {
	t     *testing.T
	truth []lie.SE3 // site_from_unit
	units []Unit
	ties  []simTie
	rng   *rand.Rand
	dim   int
}

func newStory(t *testing.T, names ...string) *story {
	s := &story{t: t, rng: rand.New(rand.NewPCG(8, 8)), dim: 3}
	for k, name := range names {
		u := Unit{Name: name, Covariance: func(i, j int) (c [36]float64) {
			n := float64(j - i)
			for k, v := range [6]float64{1e-4, 1e-4, 1e-4, 1e-6, 1e-6, 1e-6} {
				c[7*k] = n * v
			}
			return c
		}}
		for i := 0; i < 40; i++ {
			u.Poses = append(u.Poses, lie.Exp(lie.Tangent{2.5 * float64(i), 0, 0, 0, 0, 0}))
			u.TravelM = append(u.TravelM, 2.5*float64(i))
		}
		s.units = append(s.units, u)
		s.truth = append(s.truth, lie.Exp(lie.Tangent{0, 4 * float64(k), 0, 0, 0, 0}))
	}
	return s
}

// tie adds a tie between node i of a and node j of b that puts b's frame off by the twist given.
func (s *story) tie(a, i, b, j int, off lie.Tangent) {
	z := s.truth[a].Mul(s.units[a].Poses[i]).Between(lie.Exp(off).Mul(s.truth[b]).Mul(s.units[b].Poses[j]))
	sg := sigmas(.05, .5*deg)
	var c [36]float64
	for k := range sg {
		c[7*k] = sg[k] * sg[k]
	}
	small := sigmas(.02, .2*deg)
	s.ties = append(s.ties, simTie{Tie{Name: fmt.Sprintf("t%04d", len(s.ties)+1), From: End{a, i}, To: End{b, j}, Z: z.Mul(lie.Exp(noise(s.rng, s.dim, small))), Cov: c}, off == lie.Tangent{}})
}

func (s *story) decide() Result { return Decide(s.units, bare(s.ties), DefaultOptions(s.dim)) }

func (s *story) want(r Result, tie int, v Verdict, word string) {
	s.t.Helper()
	if f := r.Ties[tie]; f.Verdict != v || !strings.Contains(f.Reason, word) {
		s.t.Errorf("tie %d is %v (%s), want %v with %q", tie, f.Verdict, f.Reason, v, word)
	}
}

var elsewhere = lie.Tangent{30, 12, 0, 0, 0, .8}

func TestTwoRobotsNeedFivePlaces(t *testing.T) {
	for places, joined := range map[int]bool{1: false, 3: false, 4: false, 5: true, 6: true} {
		s := newStory(t, "ada", "bea")
		for k := 0; k < places; k++ {
			s.tie(0, 5*k, 1, 5*k, lie.Tangent{})
		}
		r := s.decide()
		if got := r.Island[0] == r.Island[1]; got != joined {
			t.Errorf("%d places: joined %v, want %v", places, got, joined)
		}
		if joined {
			s.want(r, 0, Held, "agrees")
		} else {
			s.want(r, 0, Open, "ada and bea")
		}
	}
}

func TestManyTiesOfOnePlaceAreOne(t *testing.T) {
	s := newStory(t, "ada", "bea")
	for k := 0; k < 30; k++ {
		s.tie(0, 10+k%2, 1, 20+k%2, elsewhere)
	}
	r := s.decide()
	s.want(r, 0, Open, "on 1 place ")
	if r.Hypotheses[0].Places != 1 || r.Hypotheses[0].Margin != 1 {
		t.Errorf("%d places with margin %d, want 1 and 1", r.Hypotheses[0].Places, r.Hypotheses[0].Margin)
	}
}

// One true tie against two false ones that agree, and no third witness.
func TestOutnumberedWithoutWitnessStaysOpen(t *testing.T) {
	s := newStory(t, "ada", "bea")
	s.tie(0, 3, 1, 3, lie.Tangent{})
	s.tie(0, 20, 1, 8, elsewhere)
	s.tie(0, 30, 1, 18, elsewhere)
	r := s.decide()
	for k := range s.ties {
		s.want(r, k, Open, "")
	}
	if r.Island[0] == r.Island[1] {
		t.Error("joined on two places")
	}
}

// A false set of six places between robots that two others bind to each other: refused, and the rest is not disturbed.
func TestCyclesRefuseAFalseSet(t *testing.T) {
	s := newStory(t, "ada", "bea", "cid", "dan")
	for k := 0; k < 6; k++ {
		s.tie(0, 5*k, 1, 5*k, lie.Tangent{})
		s.tie(1, 5*k+2, 2, 5*k+2, lie.Tangent{})
		s.tie(0, 5*k+3, 3, 5*k+3, lie.Tangent{})
		s.tie(2, 5*k+4, 3, 5*k+4, lie.Tangent{})
	}
	for k := 0; k < 6; k++ {
		s.tie(0, 6*k, 2, 6*k, lie.Tangent{4, -8, 0, 0, 0, 0})
	}
	r := s.decide()
	for k, x := range s.ties {
		if x.true {
			s.want(r, k, Held, "agrees")
		} else {
			s.want(r, k, Refused, "contradicted")
		}
	}
	if h := r.Hypotheses[r.Ties[24].Hypothesis]; h.Places != 6 || h.Margin >= 0 || h.Held {
		t.Errorf("the false set: %d places, margin %d, held %v", h.Places, h.Margin, h.Held)
	}
}

// A false set as strong as the only way around it: nobody can tell which is which.
func TestEvenOddsStayOpen(t *testing.T) {
	s := newStory(t, "ada", "bea", "cid")
	for k := 0; k < 6; k++ {
		s.tie(0, 5*k, 1, 5*k, lie.Tangent{})
		s.tie(1, 5*k+2, 2, 5*k+2, lie.Tangent{})
		s.tie(0, 6*k, 2, 6*k, lie.Tangent{4, -8, 0, 0, 0, 0})
	}
	r := s.decide()
	for k := range s.ties {
		if r.Ties[k].Verdict != Open {
			t.Errorf("tie %d, %v, is %v: %s", k, s.ties[k].true, r.Ties[k].Verdict, r.Ties[k].Reason)
		}
	}
}

// Three robots with three places per pair: no pair would do alone, the cycle does.
func TestCycleOfThreeNeedsFewerPlaces(t *testing.T) {
	s := newStory(t, "ada", "bea", "cid")
	for k := 0; k < 3; k++ {
		s.tie(0, 10*k, 1, 10*k, lie.Tangent{})
		s.tie(1, 10*k+3, 2, 10*k+3, lie.Tangent{})
		s.tie(2, 10*k+6, 0, 10*k+6, lie.Tangent{})
	}
	s.tie(0, 35, 1, 10, elsewhere)
	r := s.decide()
	if !slices.Equal(r.Island, []int{0, 0, 0}) {
		t.Errorf("islands %v, want one", r.Island)
	}
	for k := 0; k < 9; k++ {
		s.want(r, k, Held, "agrees")
	}
	s.want(r, 9, Refused, "contradicted")
	for u := range s.units {
		got := r.DatumFromUnit[u]
		want := s.truth[0].Between(s.truth[u])
		if distance(got.T, want.T) > .3 {
			t.Errorf("%s lies at %v, want %v", s.units[u].Name, got.T, want.T)
		}
	}
}

// Four robots take one place for another in the same way: pairs agree with each other around cycles, but it is one place.
func TestSharedLookAlikeDoesNotJoin(t *testing.T) {
	s := newStory(t, "ada", "bea", "cid", "dan")
	for k := 0; k < 6; k++ {
		s.tie(0, 6*k, 1, 6*k, lie.Tangent{})
		s.tie(2, 6*k, 3, 6*k, lie.Tangent{})
	}
	for _, p := range [][2]int{{0, 2}, {0, 3}, {1, 2}, {1, 3}} {
		s.tie(p[0], 30, p[1], 5, lie.Tangent{62, 3, 0, 0, 0, 0})
	}
	r := s.decide()
	if !slices.Equal(r.Island, []int{0, 0, 1, 1}) {
		t.Errorf("islands %v, want two", r.Island)
	}
	for k := 12; k < 16; k++ {
		s.want(r, k, Open, "")
	}
}

func TestNothingToDecide(t *testing.T) {
	r := Decide(nil, nil, DefaultOptions(2))
	if len(r.Ties) != 0 || len(r.Island) != 0 {
		t.Errorf("%+v from nothing", r)
	}
	s := newStory(t, "ada", "bea")
	s.units[1] = Unit{Name: "bea"} // has not moved yet
	r = s.decide()
	if !slices.Equal(r.Island, []int{0, 1}) {
		t.Errorf("islands %v without a tie", r.Island)
	}
}
