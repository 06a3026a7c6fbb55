package coordinator

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"

	"selvage/internal/lie"
	"selvage/msgs"
)

// base is a coordinator under test, with the summaries of simulated robots.
type base struct {
	*Coordinator
	t       testing.TB
	now     int64
	number  map[string]uint64 // records of each robot
	version map[string]uint64
}

func newBase(t testing.TB, dim int, with func(c *Config)) *base {
	c := DefaultConfig("fleet", dim)
	c.HoldAll = true
	if with != nil {
		with(&c)
	}
	return &base{Coordinator: New(c), t: t, number: map[string]uint64{}, version: map[string]uint64{}}
}

func journalName(robot string) (id msgs.JournalID) {
	copy(id[:], robot)
	return id
}

func header(robot string, number uint64) msgs.Header {
	return msgs.Header{Fleet: "fleet", Robot: robot, Journal: journalName(robot), Number: number, Session: 1}
}

// hear gives the coordinator a message that it must take.
func (b *base) hear(robot, kind string, m interface{ Marshal() ([]byte, error) }) {
	b.t.Helper()
	if err := b.try(robot, kind, m); err != nil {
		b.t.Fatal(err)
	}
}

func (b *base) try(robot, kind string, m interface{ Marshal() ([]byte, error) }) error {
	b.t.Helper()
	payload, err := m.Marshal()
	if err != nil {
		b.t.Fatal(err)
	}
	return b.Message(b.now, Message{robot, kind, payload})
}

// tick lets seconds pass and returns what is published.
func (b *base) tick(seconds int) (out []Publish) {
	b.t.Helper()
	for range seconds {
		b.now += second
		o, err := b.Tick(b.now)
		if err != nil {
			b.t.Fatal(err)
		}
		out = append(out, o...)
	}
	return out
}

// track is the true way of a robot: n poses in the datum of the test, junctions with ids 0, 10, 20, ...
type track struct {
	robot   string
	session uint32
	real    []lie.SE3
}

func newTrack(robot string, session uint32, n, dim int, seed uint64) *track {
	rng := rand.New(rand.NewPCG(seed, 8))
	k := &track{robot: robot, session: session, real: []lie.SE3{jiggle(lie.Identity(), rng, dim, 30, 1)}}
	for len(k.real) < n {
		step := lie.Identity()
		step.T[0] = 5
		k.real = append(k.real, k.real[len(k.real)-1].Mul(jiggle(step, rng, dim, 0.5, 0.3)))
	}
	return k
}

// jiggle is a pose around x.
func jiggle(x lie.SE3, rng *rand.Rand, dim int, m, rad float64) lie.SE3 {
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

// summary condenses a track in a frame of its own: a chain of cliques, each pose a little off.
func (k *track) part(dim int, seed uint64) msgs.Part {
	rng := rand.New(rand.NewPCG(seed, 9))
	frame := jiggle(lie.Identity(), rng, dim, 50, 1)
	p := msgs.Part{Session: k.session, Keyframes: 10 * len(k.real)}
	d := 3 * (dim - 1)
	for i, x := range k.real {
		y := jiggle(frame.Mul(x), rng, dim, 0.02, 0.002)
		p.Junctions = append(p.Junctions, msgs.Junction{ID: int64(10 * i), Pose: wirePose(&y, dim), TravelM: 5 * float64(i), StampNS: int64(i)})
		if i > 0 {
			c := msgs.Clique{Nodes: []int{i - 1, i}, H: make([]float64, d*d), B: make([]float64, d)}
			for r := range d {
				c.H[r*(d+1)] = 2500
				if r >= d/2+d%2 {
					c.H[r*(d+1)] = 250000
				}
				c.B[r] = rng.NormFloat64()
			}
			p.Cliques = append(p.Cliques, c)
		}
	}
	return p
}

// summarise lets a robot tell of some tracks.
func (b *base) summarise(tracks ...*track) {
	b.t.Helper()
	robot := tracks[0].robot
	b.version[robot]++
	s := &msgs.Summary{Header: header(robot, 0), Version: b.version[robot], Dim: b.width()}
	for i, k := range tracks {
		s.Parts = append(s.Parts, k.part(b.cfg.Dim, 7*b.version[robot]+uint64(i)+uint64(robot[1])))
	}
	b.hear(robot, msgs.KindSummary, s)
}

// tie is a measurement of junction j of track to from junction i of track from, right but for off metres sideways.
func (b *base) tie(from *track, i int, to *track, j int, off float64) *msgs.Tie {
	b.number[from.robot]++
	n := b.number[from.robot]
	z := from.real[i].Between(to.real[j])
	z.T[1] += off
	d := b.width()
	t := &msgs.Tie{
		Header: header(from.robot, n), ID: fmt.Sprintf("%s-%d", from.robot, n), Dim: d, Pose: wirePose(&z, b.cfg.Dim), Info: make([]float64, d*d),
		From: msgs.KeyRef{Robot: from.robot, Session: from.session, ID: int64(10 * i)}, To: msgs.KeyRef{Robot: to.robot, Session: to.session, ID: int64(10 * j)},
	}
	for r := range d {
		t.Info[r*(d+1)] = 400
		if r >= d/2+d%2 {
			t.Info[r*(d+1)] = 10000
		}
	}
	return t
}

// sees sends a true tie.
func (b *base) sees(from *track, i int, to *track, j int) {
	b.t.Helper()
	b.hear(from.robot, msgs.KindTie, b.tie(from, i, to, j, 0))
}

// beat says that a robot has applied the newest epoch and has sent everything.
func (b *base) beat(robot string, with func(h *msgs.Heartbeat)) {
	b.t.Helper()
	h := &msgs.Heartbeat{
		Header: header(robot, 0), NewestNumber: b.number[robot], Applied: b.Epoch(), SummaryVersion: b.version[robot],
		HighestIncarnation: b.cfg.Incarnation, State: "joined",
	}
	if with != nil {
		with(h)
	}
	b.hear(robot, msgs.KindHeartbeat, h)
}

// of returns the messages of a kind for a robot.
func of(out []Publish, robot, kind string) (payloads [][]byte) {
	for _, p := range out {
		if p.Robot == robot && p.Kind == kind {
			payloads = append(payloads, p.Payload)
		}
	}
	return payloads
}

// correction returns the last correction for a robot.
func correction(t testing.TB, out []Publish, robot string) *msgs.Correction {
	t.Helper()
	all := of(out, robot, msgs.KindCorrection)
	if len(all) == 0 {
		t.Fatalf("no correction for %s", robot)
	}
	c, err := msgs.DecodeCorrection(all[len(all)-1])
	if err != nil {
		t.Fatal(err)
	}
	return c
}

func want(t testing.TB, out []Publish, robot string) *msgs.Want {
	t.Helper()
	all := of(out, robot, msgs.KindWant)
	if len(all) != 1 {
		t.Fatalf("%d wants for %s, expected one", len(all), robot)
	}
	w, err := msgs.DecodeWant(all[0])
	if err != nil {
		t.Fatal(err)
	}
	return w
}

func verdicts(t testing.TB, out []Publish) (texts []string) {
	t.Helper()
	for _, p := range out {
		if p.Kind != msgs.KindVerdict {
			continue
		}
		v, err := msgs.DecodeVerdict(p.Payload)
		if err != nil {
			t.Fatal(err)
		}
		texts = append(texts, fmt.Sprintf("%s %s %s", p.Robot, v.Tie, v.Verdict))
	}
	return texts
}

func sameText(t testing.TB, got []string, expected ...string) {
	t.Helper()
	if !slices.Equal(got, expected) {
		t.Errorf("%q, expected %q", got, expected)
	}
}
