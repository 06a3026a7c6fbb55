package posegraph

import (
	"math"

	"selvage/internal/lie"
)

// PlacePoints gives the points starting values through the present poses: from the first sighting that tells range and bearing or
// the position, else from the bearings of two or more views, as the point nearest to their rays, else from ranges of four views
// (three in the plane) that do not stand in line. It returns the points that no sighting places, which keep their values.
func PlacePoints(g *Graph) (unplaced []int32) {
	const rank = 1e-3 // of the rays' normal matrix: about two degrees between them
	n := len(g.Values.Points)
	placed := make([]bool, n)
	rays := make([]lie.Mat3, n)
	sums := make([][3]float64, n)
	for _, set := range g.Sets {
		if c, ok := set.(*PointPriors); ok {
			for k, p := range c.point {
				g.Values.Points[p], placed[p] = c.at[k], true
			}
		}
	}
	for _, set := range g.Sets {
		s, ok := set.(*Sightings)
		if !ok || !s.ofPoints || s.sense == Range {
			continue
		}
		for k, p := range s.To {
			if placed[p] || s.W[k] == 0 {
				continue
			}
			x := g.Values.Poses[s.From[k]].Mul(s.Mount[k])
			if u, ok := s.Place(k); ok {
				g.Values.Points[p], placed[p] = g.flat(g.Values.Poses[s.From[k]].Apply(u)), true
				continue
			}
			if s.sense != Bearing || s.Freedoms(k) < s.g.Dim/3 {
				continue // a part of a direction or of a position
			}
			// The sum of (I - d d') (p - t) is zero at the point nearest to all rays.
			d := x.R.Apply(direction(s.Z[k]))
			for r := 0; r < 3; r++ {
				for c := 0; c < 3; c++ {
					q := -d[r] * d[c]
					if r == c {
						q++
					}
					rays[p][3*r+c] += q
					sums[p][r] += q * x.T[c]
				}
			}
		}
	}
	for p := range placed {
		if !placed[p] {
			m := &rays[p]
			scale := (m[0] + m[4] + m[8]) / 2
			if at, ok := solve3(m, sums[p]); ok && scale > 0 && weakest(m) > rank*scale {
				g.Values.Points[p], placed[p] = g.flat(at), true
			}
		}
	}
	g.placeByRanges(placed)
	for p := range placed {
		if !placed[p] {
			unplaced = append(unplaced, int32(p))
		}
	}
	return unplaced
}

// placeByRanges places points that are not yet by ranges alone. Two ranges r, s from c, d say 2 (d - c)'(p - c) = r^2 - s^2 + |d - c|^2,
// which is linear in p.
func (g *Graph) placeByRanges(placed []bool) {
	const rank = 1e-2 // of the matrix of the views' offsets: a tenth as wide as they are long
	type view struct {
		at    [3]float64
		metre float64
	}
	first := make([]*view, len(placed))
	rows := make([]lie.Mat3, len(placed))
	sums := make([][3]float64, len(placed))
	for _, set := range g.Sets {
		s, ok := set.(*Sightings)
		if !ok || !s.ofPoints || s.sense != Range {
			continue
		}
		for k, p := range s.To {
			if placed[p] || s.W[k] == 0 {
				continue
			}
			here := view{g.Values.Poses[s.From[k]].Apply(s.Mount[k].T), s.Z[k][0]}
			if first[p] == nil {
				first[p] = &here
				continue
			}
			d := minus(here.at, first[p].at)
			right := (first[p].metre*first[p].metre - here.metre*here.metre + d[0]*d[0] + d[1]*d[1] + d[2]*d[2]) / 2
			for r := range 3 {
				for c := range 3 {
					rows[p][3*r+c] += d[r] * d[c]
				}
				sums[p][r] += d[r] * right
			}
		}
	}
	for p, f := range first {
		if f == nil {
			continue
		}
		m := &rows[p]
		scale := m[0] + m[4] + m[8]
		if g.Dim == 3 {
			m[8] = scale // no height is sought
		}
		if at, ok := solve3(m, sums[p]); ok && weakest(m) > rank*scale {
			g.Values.Points[p] = g.flat([3]float64{f.at[0] + at[0], f.at[1] + at[1], f.at[2] + at[2]})
			placed[p] = true
		}
	}
}

// flat drops the height in the plane.
func (g *Graph) flat(p [3]float64) [3]float64 {
	if g.Dim == 3 {
		p[2] = 0
	}
	return p
}

// Place returns where sighting k measured what it saw in the frame of its pose, if it tells range and bearing or the position whole.
func (s *Sightings) Place(k int) (place [3]float64, whole bool) {
	z := s.Z[k]
	if s.sense == Range || s.sense == Bearing || s.Freedoms(k) < 1+s.g.Dim/3 {
		return place, false
	}
	if s.sense == RangeBearing {
		d := direction(z)
		z = [3]float64{z[0] * d[0], z[0] * d[1], z[0] * d[2]}
	}
	return s.Mount[k].Apply(z), true
}

// Cartesian turns a range with a bearing (and an elevation, in space) into the position with its information, to first order. As a
// measurement it pulls less wildly than the angles do while what is seen is still estimated near the sensor: good for a start.
func Cartesian(dim int, z [3]float64, info *lie.Mat3) (at [3]float64, of lie.Mat3) {
	d := direction(z)
	at = [3]float64{z[0] * d[0], z[0] * d[1], z[0] * d[2]}
	s := Sightings{g: &Graph{Dim: dim}, sense: RangeBearing, Mount: []lie.SE3{lie.Identity()}, Z: [][3]float64{z}}
	_, j := s.evaluate(0, at, true)
	return at, j.T().Mul(*info).Mul(j)
}

// direction returns the unit vector of a bearing and an elevation, components 1 and 2 of a measurement.
func direction(z [3]float64) [3]float64 {
	c := math.Cos(z[2])
	return [3]float64{c * math.Cos(z[1]), c * math.Sin(z[1]), math.Sin(z[2])}
}

// solve3 solves m x = b.
func solve3(m *lie.Mat3, b [3]float64) (x [3]float64, ok bool) {
	r0, r1, r2 := [3]float64(m[0:3]), [3]float64(m[3:6]), [3]float64(m[6:9])
	c0, c1, c2 := cross(r1, r2), cross(r2, r0), cross(r0, r1)
	det := r0[0]*c0[0] + r0[1]*c0[1] + r0[2]*c0[2]
	if det == 0 {
		return x, false
	}
	for i := range x {
		x[i] = (c0[i]*b[0] + c1[i]*b[1] + c2[i]*b[2]) / det
	}
	return x, true
}

func cross(a, b [3]float64) [3]float64 {
	return [3]float64{a[1]*b[2] - a[2]*b[1], a[2]*b[0] - a[0]*b[2], a[0]*b[1] - a[1]*b[0]}
}

// weakest bounds the least eigenvalue of a positive semidefinite m from below within a factor of three: the inverse of the sum of the
// inverses of all. It is taken from the eigenvalues, for in a matrix of rank one a determinant is rounding, and so are the minors.
func weakest(m *lie.Mat3) float64 {
	values, _ := eigen3(m)
	sum := 0.0
	for _, l := range values {
		if !(l > 0) {
			return 0
		}
		sum += 1 / l
	}
	return 1 / sum
}
