package scenarios

import "math/rand/v2"

// newStore lays out a store: parallel aisles along y, a cross aisle at both ends of each block of racks.
func newStore(sc *Scenario, rng *rand.Rand) *site {
	m := &sc.Site.Store
	aisles, blocks := sc.grow(m.Aisles, 30), sc.grow(m.Blocks, 2)
	s := &site{shift: m.Pitch}
	at := func(i, k int) int { return i*(blocks+1) + k }
	for i := range aisles {
		for k := range blocks + 1 {
			s.node([3]float64{float64(i) * m.Pitch, float64(k) * m.AisleLength, 0})
		}
	}
	for i := range aisles {
		for k := range blocks + 1 {
			if k < blocks {
				s.connect(at(i, k), at(i, k+1), straight(rng, s.nodes[at(i, k)], s.nodes[at(i, k+1)], 0, 1), m.Width/2)
			}
			if i+1 < aisles {
				s.connect(at(i, k), at(i+1, k), straight(rng, s.nodes[at(i, k)], s.nodes[at(i+1, k)], 0, 1), 0.75*m.Width)
			}
		}
	}
	s.entrance = s.middle(len(s.nodes))
	return s
}
