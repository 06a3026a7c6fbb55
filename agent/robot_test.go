package agent

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// robot is an agent under test with the clock of its events.
type robot struct {
	*Agent
	t   testing.TB
	now int64
}

func newRobot(t testing.TB, dim int) *robot {
	c := DefaultConfig("fleet", "r1", dim)
	c.Journal = msgs.JournalID{9}
	return &robot{Agent: New(c), t: t}
}

// do gives the agent an event that it must take.
func (r *robot) do(e Event) []Publish {
	r.t.Helper()
	out, err := r.Handle(r.now, e)
	if err != nil {
		r.t.Fatalf("%T: %v", e, err)
	}
	return out
}

// tick lets time pass, second by second, and returns what is published.
func (r *robot) tick(seconds int) (out []Publish) {
	r.t.Helper()
	for range seconds {
		r.now += second
		out = append(out, r.do(Tick{})...)
	}
	return out
}

// hear gives the agent a message.
func (r *robot) hear(kind string, m interface{ Marshal() ([]byte, error) }) ([]Publish, error) {
	r.t.Helper()
	payload, err := m.Marshal()
	if err != nil {
		r.t.Fatal(err)
	}
	return r.Handle(r.now, Message{kind, payload})
}

// want is a want for the robot from incarnation 1 under term 1, changed by with.
func (r *robot) want(with func(w *msgs.Want)) []Publish {
	r.t.Helper()
	w := &msgs.Want{Fleet: "fleet", Robot: "r1", Epoch: msgs.Epoch{Incarnation: 1}, Term: 1, Journal: r.cfg.Journal}
	with(w)
	out, err := r.hear(msgs.KindWant, w)
	if err != nil {
		r.t.Fatal(err)
	}
	return out
}

// kinds returns the messages of one kind.
func kinds(out []Publish, kind string) (of []Publish) {
	for _, p := range out {
		if p.Kind == kind {
			of = append(of, p)
		}
	}
	return of
}

// summary returns the only summary among the messages.
func summary(t testing.TB, out []Publish) *msgs.Summary {
	t.Helper()
	of := kinds(out, msgs.KindSummary)
	if len(of) != 1 {
		t.Fatalf("%d summaries, want one", len(of))
	}
	s, err := msgs.DecodeSummary(of[0].Payload)
	if err != nil {
		t.Fatal(err)
	}
	if s.Version != of[0].Number {
		t.Errorf("summary of version %d published as %d", s.Version, of[0].Number)
	}
	return s
}

// sigmas is the information of independent components.
func sigmas(m, rad float64) (info [36]float64) {
	for i := range 3 {
		info[7*i], info[7*(i+3)] = 1/(m*m), 1/(rad*rad)
	}
	return info
}

// motion is a rigid motion of the survey's dimension, Gaussian of the given sigmas around x.
func motion(x lie.SE3, rng *rand.Rand, dim int, m, rad float64) lie.SE3 {
	var xi lie.Tangent
	for i := range 3 {
		xi[i], xi[i+3] = m*rng.NormFloat64(), rad*rng.NormFloat64()
	}
	if dim == 2 {
		xi[2], xi[3], xi[4] = 0, 0, 0
	}
	y := x.Mul(lie.Exp(xi))
	if dim == 2 {
		y = lie.Planar(&y).Spatial()
	}
	return y
}

// walk drives n keyframes with ids first, first+1, ... around a loop, with noisy odometry and a closure every tenth.
func (r *robot) walk(session uint32, first int64, n int, seed uint64) {
	r.t.Helper()
	rng := rand.New(rand.NewPCG(seed, 1))
	dim := r.cfg.Dim
	step := lie.Exp(lie.Tangent{1, 0, 0, 0, 0, 2 * math.Pi / 20})
	if dim == 3 {
		step = lie.Exp(lie.Tangent{1, 0, 0.1, 0.02, 0, 2 * math.Pi / 20})
	} else {
		step = lie.Planar(&step).Spatial()
	}
	info := sigmas(0.02, 0.01)
	truth := []lie.SE3{lie.Identity()}
	front := lie.Identity()
	for k := range n {
		id := first + int64(k)
		if k > 0 {
			truth = append(truth, truth[k-1].Mul(step))
			z := motion(step, rng, dim, 0.02, 0.01)
			front = front.Mul(z)
			r.do(Keyframe{Session: session, ID: id, StampNS: r.now + id, Pose: front})
			r.do(Relative{Session: session, From: id - 1, To: id, Z: z, Info: info})
		} else {
			r.do(Keyframe{Session: session, ID: id, StampNS: r.now + id, Pose: front})
		}
		if k >= 20 && k%10 == 0 {
			z := truth[k-19].Between(truth[k])
			r.do(Relative{Session: session, From: id - 19, To: id, Z: motion(z, rng, dim, 0.02, 0.01), Info: info})
		}
	}
}

// see lets the robot measure another one from a keyframe.
func (r *robot) see(session uint32, id int64) []Publish {
	r.t.Helper()
	return r.do(Tie{From: msgs.KeyRef{Robot: "r1", Session: session, ID: id}, To: msgs.KeyRef{Robot: "r2", Session: 1, ID: 7}, Z: lie.Identity(), Info: sigmas(0.1, 0.02)})
}

// glance lets the robot see a mark from some keyframes, first to last, by range and bearing: about where it is from the middle of the loop.
func (r *robot) glance(session uint32, first, last int64, mark string, mount lie.SE3) {
	r.t.Helper()
	s := r.session(session)
	place := s.front[s.index[first]].Apply([3]float64{1, 4, 0})
	for id := first; id <= last; id++ {
		q := s.front[s.index[id]].Mul(mount).Inv().Apply(place)
		flat := math.Hypot(q[0], q[1])
		r.do(Sighting{Session: session, ID: id, Mark: mark, Sight: Sight{
			Sense: posegraph.RangeBearing, Value: [3]float64{math.Hypot(flat, q[2]), math.Atan2(q[1], q[0]), math.Atan2(q[2], flat)},
			Info: lie.Mat3{400, 0, 0, 0, 2500, 0, 0, 0, 2500}, Mount: mount,
		}})
	}
}

// fingerprint is everything that can be seen of an agent.
func fingerprint(a *Agent) string {
	return fmt.Sprintf("%v %v %v %d %v", a.Tracks(), a.Sightings(), a.Applied(), a.Raw(), a.Settled())
}
