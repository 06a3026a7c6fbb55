package scenarios

import (
	"math"
	"math/rand/v2"
)

// newWood lays out a wood: clearings at random places that keep their distance, curved tracks between neighbours, all of it
// draped over hills.
func newWood(sc *Scenario, rng *rand.Rand) *site {
	m := &sc.Site.Wood
	n := m.Clearings
	if n == 0 {
		n = max(8, 10*sc.Fleet.Robots)
	}
	s := &site{open: true}
	side := m.Spacing * math.Sqrt(float64(n)/0.7)
	relief := newRelief(rng, m.Relief)
	for gap := m.Spacing * 0.75; len(s.nodes) < n; gap *= 0.98 { // gives way when the wood is full
		for range 20 * n {
			p := [3]float64{uniform(rng, 0, 1.25*side), uniform(rng, 0, 0.8*side), 0}
			free := true
			for _, q := range s.nodes {
				free = free && math.Hypot(p[0]-q[0], p[1]-q[1]) >= gap
			}
			if free && len(s.nodes) < n {
				s.node(p)
			}
		}
	}
	for i := range s.nodes {
		s.nodes[i][2] = relief.height(s.nodes[i])
	}
	for _, e := range thin(rng, n, neighbours(s.nodes), 0.3) {
		p, q := s.nodes[e[0]], s.nodes[e[1]]
		line := straight(rng, p, q, 0.16*distance(p, q), 60)
		for i := range line {
			line[i][2] = relief.height(line[i])
		}
		s.connect(e[0], e[1], line, m.Width/2)
	}
	s.entrance = s.middle(n)
	return s
}

// neighbours returns the pairs of points whose circle over their distance as diameter holds no other point (Gabriel and Sokal,
// "A New Statistical Approach to Geographic Variation Analysis", Systematic Zoology 1969). They connect all points.
func neighbours(nodes [][3]float64) (pairs [][2]int) {
	for i, p := range nodes {
		for j := i + 1; j < len(nodes); j++ {
			q := nodes[j]
			cx, cy := (p[0]+q[0])/2, (p[1]+q[1])/2
			r := math.Hypot(p[0]-q[0], p[1]-q[1]) / 2
			free := true
			for k, o := range nodes {
				if k != i && k != j && math.Hypot(o[0]-cx, o[1]-cy) < r {
					free = false
					break
				}
			}
			if free {
				pairs = append(pairs, [2]int{i, j})
			}
		}
	}
	return pairs
}

// relief is a smooth landscape: waves that run in random directions.
type relief struct {
	waves [5]ripple
	dir   [5][2]float64
	scale float64
}

func newRelief(rng *rand.Rand, height float64) (r relief) {
	for i := range r.waves {
		r.waves[i] = newRipple(rng, 180)
		sin, cos := math.Sincos(uniform(rng, 0, math.Pi))
		r.dir[i] = [2]float64{cos, sin}
	}
	r.scale = height / float64(len(r.waves)) * 2
	return r
}

func (r *relief) height(p [3]float64) (z float64) {
	for i := range r.waves {
		z += r.waves[i].at(p[0]*r.dir[i][0] + p[1]*r.dir[i][1])
	}
	return r.scale * z
}
