package report

import "math"

// box is a rectangle in px.
type box struct{ x0, y0, x1, y1 float64 }

func (b box) w() float64 { return b.x1 - b.x0 }
func (b box) h() float64 { return b.y1 - b.y0 }

func (b box) meets(o box) bool {
	return b.x0 < o.x1 && o.x0 < b.x1 && b.y0 < o.y1 && o.y0 < b.y1
}

func (b box) inside(o box) bool {
	return b.x0 >= o.x0 && b.x1 <= o.x1 && b.y0 >= o.y0 && b.y1 <= o.y1
}

// nearest is the point of the box next to p.
func (b box) nearest(p point) point {
	return point{max(b.x0, min(b.x1, p[0])), max(b.y0, min(b.y1, p[1]))}
}

// placer finds room for labels: clear of each other, and on as little ink as
// can be had nearby.
type placer struct {
	frame box
	taken []box
	nx    int
	cells []float64 // ink in cells of cell x cell px, in px of line
}

const (
	cell  = 4.0    // px
	clash = 1000.0 // cost of lying on another label
)

func newPlacer(frame box) *placer {
	nx, ny := int(frame.w()/cell)+1, int(frame.h()/cell)+1
	return &placer{frame: frame, nx: nx, cells: make([]float64, nx*ny)}
}

// ink records a line that labels should keep off.
func (p *placer) ink(pts []point) {
	for i := 1; i < len(pts); i++ {
		a, b := pts[i-1], pts[i]
		n := int(math.Hypot(b[0]-a[0], b[1]-a[1])/cell) + 1
		for k := 0; k <= n; k++ {
			t := float64(k) / float64(n)
			x, y := a[0]+t*(b[0]-a[0])-p.frame.x0, a[1]+t*(b[1]-a[1])-p.frame.y0
			if x < 0 || y < 0 || x > p.frame.w() || y > p.frame.h() {
				continue
			}
			p.cells[int(y/cell)*p.nx+int(x/cell)] += cell
		}
	}
}

// cost of putting something at b: the ink beneath it, and much more for what
// has been placed before.
func (p *placer) cost(b box) float64 {
	sum := 0.0
	for y := math.Max(0, b.y0-p.frame.y0); y < b.y1-p.frame.y0 && y < p.frame.h(); y += cell {
		for x := math.Max(0, b.x0-p.frame.x0); x < b.x1-p.frame.x0 && x < p.frame.w(); x += cell {
			sum += min(3*cell, p.cells[int(y/cell)*p.nx+int(x/cell)])
		}
	}
	for _, t := range p.taken {
		if b.meets(t) {
			sum += clash
		}
	}
	return sum
}

// place finds a spot for a label of w x h px near the anchor and takes it.
func (p *placer) place(anchor point, w, h float64) box {
	const directions = 16
	best, at := math.Inf(1), box{anchor[0] + 8, anchor[1] - h/2, anchor[0] + 8 + w, anchor[1] + h/2}
	for _, r := range [...]float64{8, 16, 26, 38, 52, 70, 95, 125, 160, 200, 250} {
		for k := range directions {
			// Right first, then turning away from it on both sides.
			turn := float64((k+1)/2) * (1 - 2*float64(k%2)) * 2 * math.Pi / directions
			sin, cos := math.Sincos(turn)
			x, y := anchor[0]+cos*(r+w/2)-w/2, anchor[1]+sin*(r+h/2)-h/2
			b := box{x, y, x + w, y + h}
			if !b.inside(p.frame) {
				continue
			}
			c := p.cost(b) + 0.7*r
			if r > 16 { // its leader must not run through another label
				n := b.nearest(anchor)
				for _, t := range p.taken {
					if crosses(anchor, n, t) {
						c += clash / 4
					}
				}
			}
			if c < best-1e-9 {
				best, at = c, b
			}
		}
	}
	if best >= clash { // crowded: the nearest free spot anywhere
		for y := p.frame.y0; y+h <= p.frame.y1; y += 2 * cell {
			for x := p.frame.x0; x+w <= p.frame.x1; x += 2 * cell {
				b := box{x, y, x + w, y + h}
				n := b.nearest(anchor)
				if c := p.cost(b) + 0.7*math.Hypot(n[0]-anchor[0], n[1]-anchor[1]); c < best {
					best, at = c, b
				}
			}
		}
	}
	p.taken = append(p.taken, at)
	return at
}

// crosses says whether the segment from a to b runs through t.
func crosses(a, b point, t box) bool {
	n := int(math.Hypot(b[0]-a[0], b[1]-a[1])/3) + 1
	for k := 0; k <= n; k++ {
		f := float64(k) / float64(n)
		x, y := a[0]+f*(b[0]-a[0]), a[1]+f*(b[1]-a[1])
		if x > t.x0 && x < t.x1 && y > t.y0 && y < t.y1 {
			return true
		}
	}
	return false
}

// blot marks a whole box as inked.
func (p *placer) blot(b box) {
	for y := math.Max(0, b.y0-p.frame.y0); y < b.y1-p.frame.y0 && y < p.frame.h(); y += cell {
		for x := math.Max(0, b.x0-p.frame.x0); x < b.x1-p.frame.x0 && x < p.frame.w(); x += cell {
			p.cells[int(y/cell)*p.nx+int(x/cell)] += 3 * cell
		}
	}
}
