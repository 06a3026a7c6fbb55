package evidence

import (
	"slices"

	"selvage/internal/lie"
)

// fleet weighs hypotheses against each other. A configuration gives every unit a place in its component; it satisfies a
// hypothesis if both units are in one component and lie to each other as the hypothesis says. Its score is the weight it
// satisfies.
type fleet struct {
	b  *body
	n  int // units
	hs []hypothesis

	// scratch of the moves
	capacity, flow []int // n x n
	queue, from    []int
	moved          []bool
}

type config struct {
	at    []lie.SE3 // component_from_unit
	comp  []int
	holds []bool // per hypothesis
	score int

	pa, qb [][3]float64 // per hypothesis: its mean place as either unit has it, in the component
}

func newFleet(b *body, hs []hypothesis) *fleet {
	n := len(b.tracks)
	return &fleet{b: b, n: n, hs: hs, capacity: make([]int, n*n), flow: make([]int, n*n),
		queue: make([]int, n), from: make([]int, n), moved: make([]bool, n)}
}

func (c *config) clone() config {
	return config{slices.Clone(c.at), slices.Clone(c.comp), slices.Clone(c.holds), c.score, slices.Clone(c.pa), slices.Clone(c.qb)}
}

// judge sets which hypotheses c satisfies, and its score.
func (f *fleet) judge(c *config) {
	c.score = 0
	for k := range f.hs {
		h := &f.hs[k]
		c.pa[k], c.qb[k] = c.at[h.a].Apply(h.pa), c.at[h.b].Apply(h.qb)
		c.holds[k] = false
		if c.comp[h.a] != c.comp[h.b] || far(&c.pa[k], &c.qb[k], h.shift) {
			continue
		}
		if h.turned(c.at[h.a].R.T().Mul(c.at[h.b].R)) {
			c.holds[k] = true
			c.score += h.weight
		}
	}
}

// grow joins the components with the most support, two at a time, until no hypothesis leads from one to another.
func (f *fleet) grow(c *config) {
	between := make([][]int, f.n*f.n) // hypotheses per pair of components
	for {
		f.judge(c)
		for i := range between {
			between[i] = between[i][:0]
		}
		for k := range f.hs {
			if p, q := c.comp[f.hs[k].a], c.comp[f.hs[k].b]; p != q {
				at := min(p, q)*f.n + max(p, q)
				between[at] = append(between[at], k)
			}
		}
		best, most := -1, 0
		for _, ks := range between {
			for _, k := range ks {
				if s := f.support(c, k, ks); s > most {
					best, most = k, s
				}
			}
		}
		if best < 0 {
			return
		}
		h := &f.hs[best]
		f.shift(c, c.comp[h.b], c.comp[h.a], f.displacement(c, best))
	}
}

// displacement is how the second unit of hypothesis k would have to be moved, in the component of the first, to satisfy it.
func (f *fleet) displacement(c *config, k int) lie.SE3 {
	h := &f.hs[k]
	return c.at[h.a].Mul(h.ab).Mul(c.at[h.b].Inv())
}

// support is the weight of those hypotheses that k agrees with, all of them between the same two components.
func (f *fleet) support(c *config, k int, among []int) int {
	d := f.displacement(c, k)
	sum := 0
	for _, m := range among {
		if c.comp[f.hs[m].b] == c.comp[f.hs[k].b] && f.forth(c, m, &d) || c.comp[f.hs[m].b] != c.comp[f.hs[k].b] && f.back(c, m, &d) {
			sum += f.hs[m].weight
		}
	}
	return sum
}

// forth tells whether m would be satisfied if its second unit were moved by d.
func (f *fleet) forth(c *config, m int, d *lie.SE3) bool {
	h := &f.hs[m]
	return !apartAfter(d, &c.qb[m], &c.pa[m], h.shift) && h.turned(c.at[h.a].R.T().Mul(d.R).Mul(c.at[h.b].R))
}

// back tells whether m would be satisfied if its first unit were moved by d.
func (f *fleet) back(c *config, m int, d *lie.SE3) bool {
	h := &f.hs[m]
	return !apartAfter(d, &c.pa[m], &c.qb[m], h.shift) && h.turned(d.R.Mul(c.at[h.a].R).T().Mul(c.at[h.b].R))
}

func far(p, q *[3]float64, limit float64) bool {
	x, y, z := p[0]-q[0], p[1]-q[1], p[2]-q[2]
	return x*x+y*y+z*z > limit*limit
}

// apartAfter tells whether p, moved by d, is more than limit away from q. It is what most of the search's time goes to.
func apartAfter(d *lie.SE3, p, q *[3]float64, limit float64) bool {
	x := d.R[0]*p[0] + d.R[1]*p[1] + d.R[2]*p[2] + d.T[0] - q[0]
	y := d.R[3]*p[0] + d.R[4]*p[1] + d.R[5]*p[2] + d.T[1] - q[1]
	z := d.R[6]*p[0] + d.R[7]*p[1] + d.R[8]*p[2] + d.T[2] - q[2]
	return x*x+y*y+z*z > limit*limit
}

// shift moves component from by d and makes it part of component to.
func (f *fleet) shift(c *config, from, to int, d lie.SE3) {
	for u := range c.comp {
		if c.comp[u] == from {
			c.at[u] = d.Mul(c.at[u])
			c.comp[u] = to
		}
	}
}
