package posegraph

import (
	"math"

	"selvage/internal/lie"
)

// Points are marks: things that robots see again, of which only the place is known. In the plane a point has z = 0; its block keeps
// three scalars all the same, the third held by a unit pivot (its covariance is that 1 and means nothing).

// Variables returns the number of variables, poses and points.
func (g *Graph) Variables() int { return len(g.Values.Poses) + len(g.Values.Points) }

// Point returns the variable of point k. It changes when poses are added.
func (g *Graph) Point(k int32) int32 { return int32(len(g.Values.Poses)) + k }

// width returns the scalars of a variable.
func (g *Graph) width(variable int32) int {
	if int(variable) < len(g.Values.Poses) {
		return g.Dim
	}
	return 3
}

// level sets the unit pivots of planar points.
func (s *Solver) level(a *Assembly) {
	if s.g.Dim != 3 {
		return
	}
	for k := range s.g.Values.Points {
		if m := a.Diag(s.g.Point(int32(k))); m != nil {
			m[8] = 1
		}
	}
}

func (s *Solver) advancePoints() {
	for k, p := range s.g.Values.Points {
		if o := s.offset[s.g.Point(int32(k))]; o >= 0 {
			for c := range p {
				p[c] -= s.step[int(o)+c]
			}
		}
		s.next.Points[k] = p
	}
}

// PointPriors is a batch of control points: marks whose coordinates in the datum are known, with an information matrix. They are
// the only factors that are not relative.
type PointPriors struct {
	g     *Graph
	point []int32
	at    [][3]float64
	info  []lie.Mat3
	W     []float64 // weight of each, 1 unless it is left out
}

// AddPointPriors appends an empty batch of control points to g and returns it.
func (g *Graph) AddPointPriors() *PointPriors {
	c := &PointPriors{g: g}
	g.Sets = append(g.Sets, c)
	return c
}

// Add says that a point lies at the given place, with the information matrix 3 x 3 row-major; in the plane x and y alone count.
func (c *PointPriors) Add(point int32, at [3]float64, info *lie.Mat3) {
	m := *info
	if c.g.Dim == 3 {
		at[2] = 0
		m[2], m[5], m[6], m[7], m[8] = 0, 0, 0, 0, 0
	}
	c.point, c.at, c.info, c.W = append(c.point, point), append(c.at, at), append(c.info, m), append(c.W, 1)
}

// Len returns the number of control points.
func (c *PointPriors) Len() int { return len(c.point) }

// Point returns the point of control point k.
func (c *PointPriors) Point(k int) int32 { return c.point[k] }

// Info returns the information matrix of control point k; it may be written.
func (c *PointPriors) Info(k int) *lie.Mat3 { return &c.info[k] }

// Residual returns the place of control point k less the known one.
func (c *PointPriors) Residual(k int, v *Values) [3]float64 {
	return minus(v.Points[c.point[k]], c.at[k])
}

// Keep removes the control points for which keep is false.
func (c *PointPriors) Keep(keep func(point int32) bool) {
	n := 0
	for k, p := range c.point {
		if keep(p) {
			c.point[n], c.at[n], c.info[n], c.W[n] = p, c.at[k], c.info[k], c.W[k]
			n++
		}
	}
	c.point, c.at, c.info, c.W = c.point[:n], c.at[:n], c.info[:n], c.W[:n]
}

// Couplings implements [FactorSet]: a control point couples nothing.
func (c *PointPriors) Couplings(func(i, j int32)) {}

// Bind implements [FactorSet].
func (c *PointPriors) Bind(func() Slot) {}

// Cost implements [FactorSet].
func (c *PointPriors) Cost(v *Values) float64 {
	sum := 0.0
	for k := range c.point {
		r, or := c.residual(k, v)
		sum += r[0]*or[0] + r[1]*or[1] + r[2]*or[2]
	}
	return sum / 2
}

// residual returns r, the place less the known one, and the weight times Omega r.
func (c *PointPriors) residual(k int, v *Values) (r, or [3]float64) {
	r = c.Residual(k, v)
	or = c.info[k].Apply(r)
	for i := range or {
		or[i] *= c.W[k]
	}
	return r, or
}

// Linearise implements [FactorSet].
func (c *PointPriors) Linearise(v *Values, a *Assembly) float64 {
	sum := 0.0
	for k := range c.point {
		r, or := c.residual(k, v)
		sum += r[0]*or[0] + r[1]*or[1] + r[2]*or[2]
		variable := c.g.Point(c.point[k])
		if d := a.Diag(variable); d != nil {
			for i, x := range c.info[k] {
				d[i] += c.W[k] * x
			}
			add3(a.Grad(variable), &or)
		}
	}
	return sum / 2
}

// absolute tells whether the graph has control points.
func (g *Graph) absolute() bool {
	for _, s := range g.Sets {
		if c, ok := s.(*PointPriors); ok && len(c.point) > 0 {
			return true
		}
	}
	return false
}

// held tells of each component whether control points determine its place: two apart in the plane, three not in line in space, or two
// that are not one above the other where something knows the vertical.
func (g *Graph) held(component []int32, count int) []bool {
	held := make([]bool, count)
	if !g.absolute() {
		return held
	}
	places := make([][][3]float64, count)
	level := make([]bool, count)
	for _, s := range g.Sets {
		if l, ok := s.(*Levels); ok {
			for _, v := range l.Pose {
				level[component[v]] = true
			}
		}
		c, ok := s.(*PointPriors)
		if !ok {
			continue
		}
		for k, p := range c.point {
			i := component[g.Point(p)]
			places[i] = append(places[i], c.at[k])
		}
	}
	for i, p := range places {
		if level[i] {
			for k := range p {
				p[k][2] = 0
			}
		}
		if far, off := extent(p); g.Dim == 3 || level[i] {
			held[i] = far > 0
		} else {
			held[i] = off > 1e-6*far
		}
	}
	return held
}

// extent returns how far the points reach from the first, and how far they lie off the line to the farthest.
func extent(points [][3]float64) (far, off float64) {
	var axis [3]float64
	for _, p := range points {
		d := minus(p, points[0])
		if n := length(d); n > far {
			far, axis = n, d
		}
	}
	for _, p := range points {
		if far > 0 {
			d := minus(p, points[0])
			m := lie.Skew(axis)
			off = math.Max(off, length(m.Apply(d))/far)
		}
	}
	return far, off
}

func minus(a, b [3]float64) [3]float64 { return [3]float64{a[0] - b[0], a[1] - b[1], a[2] - b[2]} }

func length(a [3]float64) float64 { return math.Sqrt(a[0]*a[0] + a[1]*a[1] + a[2]*a[2]) }
