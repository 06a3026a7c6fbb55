package evidence

import (
	"math"
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
)

// party is a fleet that walks about a site, each robot in a frame of its own, with the glimpses of its meetings.
type party struct {
	rng      *rand.Rand
	planar   bool
	frame    []lie.SE3 // site_from_unit
	path     [][][3]float64
	glimpses []Glimpse
	wrong    []bool // of the glimpses
	meetings int
}

func newParty(seed uint64, units int, planar, level bool) *party {
	p := &party{rng: rand.New(rand.NewPCG(seed, 21)), planar: planar}
	for range units {
		var xi lie.Tangent
		for c := range xi {
			xi[c] = 2 * p.rng.NormFloat64()
		}
		if planar || level {
			xi[3], xi[4] = 0, 0
		}
		if planar {
			xi[2] = 0
		}
		p.frame = append(p.frame, lie.Exp(xi))
		heading, at := 6*p.rng.Float64(), [3]float64{60 * p.rng.Float64(), 60 * p.rng.Float64()}
		var way [][3]float64
		for k := range 300 {
			heading += 0.12 * p.rng.NormFloat64()
			if at[0] < 0 || at[0] > 60 || at[1] < 0 || at[1] > 60 {
				heading = math.Atan2(30-at[1], 30-at[0])
			}
			at[0] += math.Cos(heading)
			at[1] += math.Sin(heading)
			if !planar {
				at[2] = 3 * math.Sin(float64(k)/25+heading)
			}
			way = append(way, at)
		}
		p.path = append(p.path, way)
	}
	return p
}

// meet adds n glimpses of a meeting of a and b from moment k on; it was another robot, who, that a saw.
func (p *party) meet(a, b, who, k, n int) {
	const noise = 0.1
	p.meetings++
	for i := k; i < k+n; i++ {
		spot := p.path[who][i]
		near := p.path[b][i]
		g := Glimpse{A: a, B: b, Sigma: noise, Meeting: p.meetings}
		for c := range spot {
			if c < 2 || !p.planar {
				spot[c] += noise * p.rng.NormFloat64() / 2
			}
		}
		g.InA, g.InB = p.frame[a].Inv().Apply(spot), p.frame[b].Inv().Apply(near)
		p.glimpses, p.wrong = append(p.glimpses, g), append(p.wrong, who != b)
	}
}

func (p *party) options() Options {
	if p.planar {
		return DefaultOptions(2)
	}
	return DefaultOptions(3)
}

// off is how far a joined unit is from its place in the frame of another, metres and radians.
func (p *party) off(m *Met, u int) (metres, radians float64) {
	truth := p.frame[m.Group[u]].Between(p.frame[u])
	d := truth.Between(m.Pose[u])
	xi := d.Log()
	return math.Hypot(xi[0], math.Hypot(xi[1], xi[2])), math.Hypot(xi[3], math.Hypot(xi[4], xi[5]))
}

// Meetings enough join a fleet, and the frames are right; whole meetings with the wrong robot among them join nothing wrongly and are
// no support.
func TestMeet(t *testing.T) {
	for _, planar := range []bool{true, false} {
		for units := 2; units <= 6; units++ {
			joined := 0
			for seed := range uint64(6) {
				p := newParty(seed, units, planar, false)
				for u := 1; u < units; u++ {
					for range 4 {
						p.meet(u-1, u, u, p.rng.IntN(260), 20)
					}
				}
				for range units - 1 {
					a, b, who := p.rng.IntN(units), p.rng.IntN(units), p.rng.IntN(units)
					if a != b && who != a && who != b {
						p.meet(a, b, who, p.rng.IntN(260), 20)
					}
				}
				m := Meet(units, nil, p.glimpses, p.options())
				for u := range units {
					if metres, radians := p.off(&m, u); metres > 1 || radians > 0.1 {
						t.Errorf("planar %v, %d units, seed %d: unit %d is off by %.2f m, %.3f rad", planar, units, seed, u, metres, radians)
					}
					if m.Group[u] == 0 {
						joined++
					}
				}
				for _, x := range m.Meetings {
					wrong := 0
					for _, k := range x.Supports {
						if p.wrong[k] {
							wrong++
						}
					}
					if x.Held && 4*wrong > len(x.Supports) {
						t.Errorf("planar %v, %d units, seed %d: %d of %d supports of a held meeting are with another robot", planar, units, seed, wrong, len(x.Supports))
					}
				}
			}
			if joined < 6*units*9/10 {
				t.Errorf("planar %v: %d of %d units are joined", planar, joined, 6*units)
			}
		}
	}
}

// Whole meetings with the wrong robot, and nothing else, join no units.
func TestMeetOnlyWrongly(t *testing.T) {
	for _, planar := range []bool{true, false} {
		for units := 2; units <= 6; units++ {
			for seed := range uint64(15) {
				p := newParty(seed, units+1, planar, false)
				for range 3 * units {
					a, b := p.rng.IntN(units), p.rng.IntN(units)
					who := p.rng.IntN(units + 1) // one that is no member of the fleet among them
					if a != b && who != a && who != b {
						p.meet(a, b, who, p.rng.IntN(260), 20)
					}
				}
				m := Meet(units+1, nil, p.glimpses, p.options())
				for u, g := range m.Group {
					if g != u {
						t.Errorf("planar %v, %d units, seed %d: unit %d is joined with %d: %+v", planar, units, seed, u, g, m.Meetings)
					}
				}
			}
		}
	}
}

// Robots that drive straight move alike: one meeting with the wrong one is no more than two places, however long.
func TestMeetAlongAStraightLine(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 3))
	var g []Glimpse
	for k := range 60 {
		g = append(g, Glimpse{A: 0, B: 1, InA: [3]float64{3 + float64(k), 2 + 0.05*r.NormFloat64()}, InB: [3]float64{-5, float64(k) + 0.05*r.NormFloat64()}, Sigma: 0.1})
	}
	m := Meet(2, nil, g, DefaultOptions(2))
	if len(m.Meetings) != 1 || m.Meetings[0].Held || m.Meetings[0].Places != 2 || len(m.Meetings[0].Supports) < 55 {
		t.Errorf("%+v", m.Meetings)
	}
}

// Marks that two units know by name join them: three in the plane, four in space, three where z points up in both; one fewer leaves
// nothing that checks them. One mark taken for another among them does not matter where there are enough, and parts the
// units where there are not.
func TestMeetByMarks(t *testing.T) {
	for _, c := range []struct {
		planar, level  bool
		marks, swapped int
		joined         bool
	}{
		{true, false, 2, 0, false}, {true, false, 3, 0, true}, {true, false, 8, 2, true}, {true, false, 3, 2, false},
		{false, false, 3, 0, false}, {false, false, 4, 0, true}, {false, true, 2, 0, false}, {false, true, 3, 0, true},
	} {
		for seed := range uint64(20) {
			p := newParty(seed, 2, c.planar, c.level)
			var marks [][3]float64
			for k := range c.marks { // round the site, not in line
				turn := 2*math.Pi*float64(k)/float64(c.marks) + 0.5*p.rng.Float64()
				m := [3]float64{30 + 20*math.Cos(turn), 30 + 25*math.Sin(turn)}
				if !c.planar {
					m[2] = 8 * p.rng.Float64()
				}
				marks = append(marks, m)
			}
			for k := range marks {
				g := Glimpse{A: 1, B: 0, Sigma: 0.1, Named: true, InA: p.frame[1].Inv().Apply(marks[k])}
				at := marks[k]
				if k < c.swapped {
					at = marks[(k+1)%c.swapped]
				}
				for i := range at {
					if i < 2 || !c.planar {
						at[i] += 0.04 * p.rng.NormFloat64()
					}
				}
				g.InB = p.frame[0].Inv().Apply(at)
				p.glimpses = append(p.glimpses, g)
			}
			var level []bool
			if c.level {
				level = []bool{true, true}
			}
			m := Meet(2, level, p.glimpses, p.options())
			if got := m.Group[1] == 0; got != c.joined {
				t.Errorf("%+v, seed %d: joined %v: %+v", c, seed, got, m.Meetings)
			} else if metres, radians := p.off(&m, 1); metres > 2 || radians > 0.05 {
				t.Errorf("%+v, seed %d: off by %.2f m, %.3f rad", c, seed, metres, radians)
			}
		}
	}
}
