package coordinator

import (
	"encoding/binary"
	"fmt"
	"math"
	"testing"

	"selvage/msgs"
)

// program is a list of bytes read as choices; it ends in zeros.
type program struct{ rest []byte }

func (p *program) byte() byte {
	if len(p.rest) == 0 {
		return 0
	}
	b := p.rest[0]
	p.rest = p.rest[1:]
	return b
}

// below picks a number below n.
func (p *program) below(n int) int { return int(p.byte()) % n }

// number picks a number, small or extreme.
func (p *program) number() float64 {
	return [...]float64{0, 1, -1, 0.5, 3, -7, 1e-12, 1e3, -1e6, 9e8, 1e9, -1e9}[p.below(12)]
}

// strength picks a diagonal entry of an information matrix.
func (p *program) strength() float64 {
	return [...]float64{0, 1, 100, 1e4, 1e-30, 1e8, 1e14, 1e30, 1e60}[p.below(9)]
}

func (p *program) pose(dim int) msgs.Pose {
	angle := p.number()
	x := msgs.Pose{T: [3]float64{p.number(), p.number(), 0}, Q: [4]float64{2: math.Sin(angle / 2), 3: math.Cos(angle / 2)}}
	if dim == 3 {
		x.T[2] = p.number()
	}
	return x
}

func (p *program) robot() string {
	return [...]string{"h1", "h2", "r1", "r2", "r3", "nobody"}[p.below(6)]
}

func (p *program) id() int64 {
	return [...]int64{0, 10, 20, 30, -1, 1 << 62, -1 << 62, 5}[p.below(8)]
}

func (p *program) header(robot string, number uint64) msgs.Header {
	h := header(robot, number)
	h.Journal[15] = byte(p.below(3))
	h.Session = uint32(p.below(3))
	return h
}

// message picks a message of a robot that may encode.
func (p *program) message(robot string, dim int) (kind string, m interface{ Marshal() ([]byte, error) }) {
	d := 3 * (dim - 1)
	switch p.below(4) {
	case 0:
		return msgs.KindHeartbeat, &msgs.Heartbeat{
			Header: p.header(robot, 0), NewestNumber: uint64(p.byte()) << p.below(57), Applied: msgs.Epoch{Incarnation: uint64(p.below(3)), Number: uint64(p.byte())},
			SummaryVersion: uint64(p.byte()), HighestIncarnation: uint64(p.below(4)), State: "hostile",
		}
	case 1, 2:
		t := &msgs.Tie{
			Header: p.header(robot, uint64(p.below(5))+uint64(p.byte())<<p.below(57)), ID: fmt.Sprintf("r1-%d", p.below(40)), Pose: p.pose(dim), Dim: d,
			From: msgs.KeyRef{Robot: robot, Session: uint32(p.below(3)), ID: p.id()}, To: msgs.KeyRef{Robot: p.robot(), Session: uint32(p.below(3)), ID: p.id()},
			Info: make([]float64, d*d),
		}
		if p.below(4) == 0 {
			t.To.ByStamp, t.To.StampNS, t.To.ID = true, t.To.ID, 0
		}
		for i := range d {
			t.Info[i*(d+1)] = p.strength()
		}
		if p.below(3) == 0 {
			t.Pose, t.Info, t.Sight = msgs.Pose{}, nil, p.sight(dim)
		}
		return msgs.KindTie, t
	}
	s := &msgs.Summary{Header: p.header(robot, 0), Version: uint64(p.byte()), Answers: msgs.Epoch{Number: uint64(p.byte())}, Dim: d}
	for session := range 1 + p.below(3) {
		part := msgs.Part{Session: uint32(session), Cost: math.Abs(p.number()), Keyframes: 3}
		for i := range 1 + p.below(5) {
			part.Junctions = append(part.Junctions, msgs.Junction{ID: int64(10 * i), Pose: p.pose(dim), TravelM: math.Abs(p.number()), StampNS: int64(i), Resolved: []int64{int64(10 * p.below(4))}})
		}
		for range p.below(6) {
			i, j := p.below(len(part.Junctions)), p.below(len(part.Junctions))
			if i == j {
				continue
			}
			c := msgs.Clique{Nodes: []int{i, j}, H: make([]float64, d*d), B: make([]float64, d)}
			for k := range d {
				c.H[k*(d+1)], c.B[k] = p.strength(), p.number()
			}
			part.Cliques = append(part.Cliques, c)
		}
		p.marks(&part, dim)
		s.Parts = append(s.Parts, part)
	}
	return msgs.KindSummary, s
}

// sight picks what a sensor claims to have seen.
func (p *program) sight(dim int) *msgs.Sight {
	s := &msgs.Sight{Sense: msgs.Sense(1 + p.below(4)), Mount: p.pose(3), Spot: [3]float64{p.number(), p.number(), p.number()}}
	for i := range dim {
		switch {
		case s.Sense == msgs.Range && i > 0, s.Sense == msgs.Bearing && i == 0:
			continue
		case s.Sense != msgs.Position && i == 0:
			s.Value[i] = math.Abs(p.number())
		case s.Sense != msgs.Position:
			s.Value[i] = math.Remainder(p.number(), math.Pi)
		default:
			s.Value[i] = p.number()
		}
		s.Info[4*i] = p.strength()
	}
	if i := p.below(2); p.below(3) == 0 && s.Info[4*i] > 0 && s.Info[4*i+4] > 0 { // of lower rank
		x := math.Sqrt(s.Info[4*i]) * math.Sqrt(s.Info[4*i+4])
		s.Info[3*i+i+1], s.Info[3*i+3+i] = x, x
	}
	return s
}

// marks adds points, with cliques over them, and levels to a part.
func (p *program) marks(part *msgs.Part, dim int) {
	d := 3 * (dim - 1)
	for m := range 5 {
		at := [3]float64{p.number(), p.number()}
		if dim == 3 {
			at[2] = p.number()
		}
		switch p.below(3) {
		case 0:
			part.Points = append(part.Points, msgs.Point{Mark: fmt.Sprint("m", m), At: at})
		case 1:
			part.Seen = append(part.Seen, fmt.Sprint("m", m))
		}
	}
	for range p.below(4) {
		if len(part.Points) == 0 {
			break
		}
		c := msgs.Clique{Nodes: []int{p.below(len(part.Junctions))}, Points: []int{p.below(len(part.Points))}}
		if o := p.below(len(part.Junctions)); o != c.Nodes[0] && p.below(2) == 0 {
			c.Nodes = append(c.Nodes, o)
		}
		n := d*(len(c.Nodes)-1) + 3
		c.H, c.B = make([]float64, n*n), make([]float64, n)
		for k := range n {
			c.H[k*(n+1)], c.B[k] = p.strength(), p.number()
		}
		part.Cliques = append(part.Cliques, c)
	}
	if dim == 3 && p.below(3) == 0 {
		part.Levels = []msgs.Level{{Node: p.below(len(part.Junctions)), Up: [][3]float64{{0, 0, 1}, {0, 0, -1}, {1, 0, 0}, {0.6, 0, 0.8}}[p.below(4)], Sigma: []float64{1e-12, 0.01, 1}[p.below(3)]}}
	}
}

// siege lets hostile robots say what the program chooses, between what three honest robots say, and demands that the honest robots
// are joined in the end as if they were alone.
func siege(t testing.TB, bytes []byte) {
	p := &program{bytes}
	dim := 2 + p.below(2)
	hold := p.below(2) == 0
	known := p.below(4)
	b := newBase(t, dim, func(c *Config) {
		c.HoldAll = hold
		for m := range known {
			c.Marks = append(c.Marks, Mark{Name: fmt.Sprint("m", m), Role: Control, At: [3]float64{float64(m), float64(m * m), 1}, Sigma: [3]float64{0.1, 0.1, 0.1}})
		}
		c.LevelDatum = known%2 == 1
	})
	var k []*track
	for i, robot := range []string{"r1", "r2", "r3"} {
		k = append(k, newTrack(robot, 1, 30, dim, uint64(i)))
	}
	shout := func() {
		for range 4 {
			robot := [2]string{"h1", "h2"}[p.below(2)]
			kind, m := p.message(robot, dim)
			if payload, err := m.Marshal(); err == nil {
				_ = b.Message(b.now, Message{robot, kind, payload}) // refused or not
			}
		}
	}
	pass := func(seconds int64) {
		for range seconds / 5 {
			b.now += 5 * second
			out, _ := b.Tick(b.now) // what cannot be written to the hostile is said
			for _, o := range out {
				if o.Kind == msgs.KindCorrection && o.Robot[0] == 'r' {
					b.beat(o.Robot, nil)
				}
			}
		}
	}
	for i := 0; i < 30; i += 3 {
		if i%9 == 0 {
			shout()
			for _, x := range k {
				b.summarise(x)
			}
			pass(35)
		}
		b.sees(k[0], i, k[1], 29-i)
		b.sees(k[1], i+1, k[2], i)
		b.sees(k[2], i+2, k[0], i+1)
	}
	shout()
	pass(70)
	held := 0
	for _, f := range b.Findings() {
		if f.From.Robot[0] == 'r' && f.To.Robot[0] == 'r' && f.Verdict == msgs.Held {
			held++
		}
	}
	if held < 27 {
		t.Errorf("%d of thirty true ties are held", held)
	}
	var island string
	for i, x := range k {
		u := placed(t, b, x.robot)
		c, err := msgs.DecodeCorrection(b.robots[x.robot].corr)
		if err != nil {
			t.Fatalf("%s: %v", x.robot, err)
		}
		if i == 0 {
			island = u.Island
		}
		if !u.Joined || u.Island != island || c.Epoch != b.Epoch() || !c.Parts[0].Joined {
			t.Errorf("%s: joined %v to %q, correction %v of %v", x.robot, u.Joined, u.Island, c.Epoch, b.Epoch())
			continue
		}
		// As the tracks have it but for their noise: true poses seen from the first junction of r1.
		first := placed(t, b, "r1").Poses[0]
		for j := range u.Poses {
			got, want := first.Between(u.Poses[j]).T, k[0].real[0].Between(x.real[j]).T
			if off := math.Hypot(math.Hypot(got[0]-want[0], got[1]-want[1]), got[2]-want[2]); !(off < 1.5) {
				t.Errorf("%s: junction %d is off by %.2f m", x.robot, j, off)
				break
			}
		}
	}
}

// TestSiege: programs drawn at random.
func TestSiege(t *testing.T) {
	for n := range uint64(60) {
		t.Run(fmt.Sprint(n), func(t *testing.T) { siege(t, drawn(n)) })
	}
}

// drawn is a random program.
func drawn(n uint64) []byte {
	out := make([]byte, 0, 2048)
	for x := n*0x9e3779b97f4a7c15 + 1; len(out) < cap(out); {
		x ^= x << 13
		x ^= x >> 7
		x ^= x << 17
		out = binary.LittleEndian.AppendUint64(out, x)
	}
	out[0], out[1] = byte(n), byte(n/2)
	return out
}

func FuzzSiege(f *testing.F) {
	for n := range uint64(4) {
		f.Add(drawn(n))
	}
	f.Fuzz(func(t *testing.T, program []byte) { siege(t, program) })
}
