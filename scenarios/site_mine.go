package scenarios

import (
	"math"
	"math/rand/v2"
)

// newMine lays out a mine: on each level bowed drifts joined by oblique cross-cuts, some of them not driven, with blind
// headings beyond the last ones; declines in full circles join the levels at both ends.
func newMine(sc *Scenario, rng *rand.Rand) *site {
	m := &sc.Site.Mine
	drifts, cuts := sc.grow(m.Drifts, 5), sc.grow(m.CrossCuts, 8)
	half := m.Width / 2
	s := &site{}
	bow := newRipple(rng, 250)
	west, east := rng.IntN(drifts), rng.IntN(drifts)
	var above []int // nodes of the level above
	for level := range m.Levels {
		ids := make([]int, drifts*cuts)
		fall := newRipple(rng, 120)
		for j := range drifts {
			for i := range cuts {
				x := float64(i)*m.CrossCutSpacing + 0.3*float64(j)*m.DriftSpacing + uniform(rng, -0.16, 0.16)*m.CrossCutSpacing
				y := float64(j)*m.DriftSpacing + uniform(rng, -0.12, 0.12)*m.DriftSpacing
				y += 0.4 * m.DriftSpacing * bow.at(x)
				z := -float64(level)*m.LevelSpacing - m.Gradient*x + 0.6*fall.at(x+y)
				p := [3]float64{x, y, z}
				if shaft := i == 0 && j == west || i == cuts-1 && j == east; shaft && level > 0 {
					up := s.nodes[above[j*cuts+i]] // the decline comes back under where it left
					p[0], p[1] = up[0], up[1]
				}
				ids[j*cuts+i] = s.node(p)
			}
		}
		var pairs [][2]int
		for j := range drifts {
			for i := range cuts {
				if i+1 < cuts {
					pairs = append(pairs, [2]int{ids[j*cuts+i], ids[j*cuts+i+1]})
				}
				if j+1 < drifts {
					pairs = append(pairs, [2]int{ids[j*cuts+i], ids[(j+1)*cuts+i]})
				}
			}
		}
		first := ids[0]
		for i := range pairs { // thin counts nodes from 0
			pairs[i][0] -= first
			pairs[i][1] -= first
		}
		for _, p := range thin(rng, len(ids), pairs, 0.22) {
			a, b := p[0]+first, p[1]+first
			s.connect(a, b, straight(rng, s.nodes[a], s.nodes[b], 1.5, 45), half)
		}
		for j := range drifts { // blind headings
			for _, end := range []int{0, cuts - 1} {
				if end == 0 && j == west || end > 0 && j == east || rng.Float64() < 0.5 {
					continue
				}
				a := ids[j*cuts+end]
				p := s.nodes[a]
				sign := 1.0
				if end == 0 {
					sign = -1
				}
				l := uniform(rng, 12, 28)
				b := s.node([3]float64{p[0] + sign*l, p[1] + uniform(rng, -0.3, 0.3)*l, p[2] + 0.01*l})
				s.connect(a, b, straight(rng, p, s.nodes[b], 0.6, 30), half)
			}
		}
		if level > 0 {
			w, e := west*cuts, east*cuts+cuts-1
			s.connect(above[w], ids[w], decline(s.nodes[above[w]], s.nodes[ids[w]], -1), half)
			s.connect(above[e], ids[e], decline(s.nodes[above[e]], s.nodes[ids[e]], 1), half)
		}
		above = ids
	}
	s.entrance = s.middle(drifts * cuts) // the shaft station of the first level
	return s
}

// decline returns a full circle from p down to q below it, on the side of the sign of x, at a gradient of about 1 in 7.
func decline(p, q [3]float64, side float64) [][3]float64 {
	radius := 7 * math.Abs(p[2]-q[2]) / (2 * math.Pi)
	n := int(2 * math.Pi * radius)
	line := make([][3]float64, n+1)
	for i := range line {
		t := float64(i) / float64(n)
		sin, cos := math.Sincos(2 * math.Pi * t)
		line[i] = between(p, q, t)
		line[i][0] += side * radius * (1 - cos)
		line[i][1] += side * radius * sin
	}
	line[0], line[n] = p, q
	return line
}
