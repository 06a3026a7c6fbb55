package evidence

import (
	"fmt"
	"math"
	"math/rand/v2"
	"regexp"
	"strconv"
	"strings"
	"testing"

	"selvage/internal/lie"
)

// asked takes apart what a finding asks for.
var asked = regexp.MustCompile(`(\d+) more ties? between (\w+) and (\w+), more than (\d+) m along both tracks from (t\d+)`)

// An open tie says what would settle it, and that does: with as many more ties as it asks for, at places as far apart as it asks for,
// it is held, with one fewer it is not.
func TestWhatWouldSettleIt(t *testing.T) {
	truth := lie.Tangent{}
	cases := []struct {
		name  string
		tell  func(s *story)
		robot []string
		texts []string // of the first open tie
		more  int
		apart float64
	}{
		{"two robots, one tie", func(s *story) { s.tie(0, 10, 1, 20, truth) }, []string{"ada", "bea"}, []string{
			"rest on 1 place (t0001) and lead by 1 of the 5 needed with no third robot to confirm them",
			"4 more ties between ada and bea, more than 5 m along both tracks from t0001 and from each other, or ties of a third robot with both, would settle it"}, 4, 5},
		{"one place thrice", func(s *story) { s.tie(0, 10, 1, 20, truth); s.tie(0, 10, 1, 20, truth); s.tie(0, 11, 1, 20, truth) }, []string{"ada", "bea"}, []string{
			"rest on 1 place (t0001) and lead by 1 of the 5 needed"}, 4, 5},
		{"margin too small", func(s *story) {
			for k := range 4 {
				s.tie(0, 5*k, 1, 5*k, truth)
			}
		}, []string{"ada", "bea"}, []string{
			"rest on 4 places (t0001, t0002, t0003 and 1 more) and lead by 4 of the 5 needed",
			"1 more tie between ada and bea, more than 5 m along both tracks from t0001, t0002, t0003 and 1 more, or ties of a third robot with both"}, 1, 5},
		{"margin too small against a rival", func(s *story) {
			for k := range 5 {
				s.tie(0, 5*k, 1, 5*k, truth)
			}
			s.tie(0, 33, 1, 8, elsewhere)
			s.tie(0, 37, 1, 12, elsewhere)
		}, []string{"ada", "bea"}, []string{"rest on 5 places (t0001, t0002, t0003 and 2 more) and lead by 3 of the 5 needed", "2 more ties between ada and bea, "}, 2, 5},
		{"bridge missing", func(s *story) {
			for k := range 2 {
				s.tie(0, 5*k, 2, 5*k, truth)
			}
			for k := range 6 {
				s.tie(0, 5*k, 1, 5*k, truth)
			}
		}, []string{"ada", "bea", "cid"}, []string{
			"the ties between ada and cid rest on 2 places (t0001 and t0002) and lead by 2 of the 5 needed with no third robot to confirm them",
			"3 more ties between ada and cid, more than 5 m along both tracks from t0001 and t0002 and from each other, or ties of bea, which shares a datum with ada, with cid, would settle it"}, 3, 5},
		{"one place that might look like another", func(s *story) {
			for _, p := range [][2]int{{0, 2}, {0, 3}, {1, 2}, {1, 3}} {
				s.tie(p[0], 30, p[1], 31, truth)
			}
			for k := range 6 {
				s.tie(0, 6*k, 1, 6*k, truth)
				s.tie(2, 6*k, 3, 6*k, truth)
			}
		}, []string{"ada", "bea", "cid", "dan"}, []string{
			"the ties between ada and cid rest on 1 place (t0001), and all that confirms them falls away with two places struck out",
			"where one place looks like another", "2 more ties between ada and cid, more than 10 m along both tracks from t0001 and from each other, would settle it"}, 2, 10},
	}
	for _, c := range cases {
		for _, fewer := range []int{-1, 1, 0} {
			s := newStory(t, c.robot...)
			c.tell(s)
			if fewer >= 0 { // as far as asked for from the others and from each other
				a, b := s.ties[0].From, s.ties[0].To
				first := 39
				if a.Node >= 20 {
					first = 25
				}
				for k := range c.more - fewer {
					s.tie(a.Unit, first-5*k, b.Unit, first-1-5*k, truth)
				}
			}
			r := s.decide()
			f := r.Ties[0]
			if want := map[bool]Verdict{true: Held, false: Open}[fewer == 0]; f.Verdict != want {
				t.Errorf("%s, asked for %d, %d fewer: %v, %s", c.name, c.more, fewer, f.Verdict, f.Reason)
			}
			if fewer >= 0 {
				continue
			}
			for _, text := range c.texts {
				if !strings.Contains(f.Reason, text) {
					t.Errorf("%s: %q lacks %q", c.name, f.Reason, text)
				}
			}
			m := asked.FindStringSubmatch(f.Reason)
			if m == nil || m[1] != strconv.Itoa(c.more) || m[4] != fmt.Sprint(c.apart) || m[5] != "t0001" {
				t.Errorf("%s asks for %q in %q", c.name, m, f.Reason)
			}
		}
	}
}

// Ties within an island that stay open name the tie, the robots and the distance too.
func TestWhatWouldSettleItWithinAnIsland(t *testing.T) {
	truth := lie.Tangent{}
	s := newStory(t, "ada", "bea")
	for k := range 6 {
		s.tie(0, 3*k, 1, 3*k, truth)
	}
	s.tie(0, 4, 1, 4, lie.Tangent{0, .32}) // off by more than its sigmas allow and less than is out of the question
	r := s.decide()
	s.want(r, 6, Open, "fits the ties held badly: misclosure ")
	s.want(r, 6, Open, "1 more tie between ada and bea, more than 5 m along both tracks from t0007, but near it, would settle it")

	b := newBody(s.units, bare(s.ties), DefaultOptions(3)) // the texts that take a fleet to come about
	for _, c := range []struct{ got, want string }{
		{b.onePlace(6), "nothing but ties of the same place speaks about it: 1 more tie between ada and bea, more than 5 m along both tracks from t0007 would settle it"},
		{b.faraway(6, []int{0, 5}), "the nearest of its two robots, t0001, is 10 m along the track of ada and 10 m along that of bea away, so that it might by chance: 1 more tie between ada and bea, more than 5 m along both tracks from t0007, yet nearer than that would settle it"},
		{b.faraway(6, nil), "by so long a way through other robots that it might by chance: 1 more tie between ada and bea, more than 5 m along both tracks from t0007 would settle it"},
		{b.crossed(6, &prediction{squared: 99, ways: 1}, []int{1, 2}), "but the way over t0002 and t0003 contradicts these: misclosure 99.0, bound 22.5; 1 more tie between ada and bea, more than 5 m along both tracks from t0002 would settle which are wrong"},
	} {
		if !strings.Contains(c.got, c.want) {
			t.Errorf("%s\nlacks\n%s", c.got, c.want)
		}
	}
	if got := b.named([]int{0, 1, 2, 3, 4}); got != "t0001, t0002, t0003 and 2 more" {
		t.Error(got)
	}
	b.ids[0] = ""
	if got := b.name(0); got != "number 0" {
		t.Error(got)
	}
}

// One true tie against two false ones that agree with each other, and no third witness: nobody can tell, and nothing is guessed. All
// three stay open, however the robots went, in the plane and in space, whatever the noise; so they do with robots around that
// bear no witness between the two.
func TestOneTrueAgainstTwoThatAgree(t *testing.T) {
	walks := map[string]func(rng *rand.Rand, k int) lie.Tangent{ // the step into node k
		"straight": func(*rand.Rand, int) lie.Tangent { return lie.Tangent{0: 2.5} },
		"circle":   func(*rand.Rand, int) lie.Tangent { return lie.Tangent{0: 2.5, 5: 2 * math.Pi / 40} },
		"corners": func(_ *rand.Rand, k int) lie.Tangent {
			if k%10 == 0 {
				return lie.Tangent{0: 2.5, 5: math.Pi / 2}
			}
			return lie.Tangent{0: 2.5}
		},
		"wandering": func(rng *rand.Rand, _ int) lie.Tangent { return lie.Tangent{0: 2.5, 5: .3 * rng.NormFloat64()} },
	}
	for name, step := range walks {
		for dim := 2; dim <= 3; dim++ {
			for bystander := range 2 {
				for seed := range uint64(20) {
					rng := rand.New(rand.NewPCG(seed, 11))
					s := newStory(t, []string{"ada", "bea", "cid"}[:2+bystander]...)
					s.rng, s.dim = rng, dim
					for u := range s.units {
						s.truth[u] = lie.Exp(lie.Tangent{20 * rng.NormFloat64(), 20 * rng.NormFloat64(), 0, 0, 0, 3 * rng.NormFloat64()})
						for k := 1; k < 40; k++ {
							s.units[u].Poses[k] = s.units[u].Poses[k-1].Mul(lie.Exp(step(rng, k)))
						}
					}
					wrong := lie.Tangent{8 + 30*rng.Float64(), 30 * rng.NormFloat64(), 0, 0, 0, rng.NormFloat64()}
					i, j := rng.IntN(10), rng.IntN(10)
					s.tie(0, 15+i, 1, 12+j, lie.Tangent{})
					s.tie(0, i, 1, 25+j, wrong)
					s.tie(0, 30+i, 1, j, wrong)
					if bystander == 1 { // bound to ada, never met bea
						for k := range 6 {
							s.tie(0, 6*k, 2, 6*k, lie.Tangent{})
						}
					}
					r := s.decide()
					for k := range 3 {
						if f := r.Ties[k]; f.Verdict != Open || !strings.Contains(f.Reason, "more ties between ada and bea, more than 5 m along both tracks from t000") {
							t.Errorf("%s, %d-D, seed %d, %d bystanders: tie %d is %v: %s", name, dim, seed, bystander, k, f.Verdict, f.Reason)
						}
					}
					if r.Island[0] == r.Island[1] {
						t.Errorf("%s, %d-D, seed %d: joined", name, dim, seed)
					}
				}
			}
		}
	}
}
