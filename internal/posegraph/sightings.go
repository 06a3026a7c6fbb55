package posegraph

import (
	"math"

	"selvage/internal/lie"
)

// Sense is what a sensor tells of the place of what it sees.
type Sense uint8

// The senses. Residuals have three components: range, bearing and elevation in metres and radians, or the position x, y, z in the
// frame of the sensor. What a sense does not measure is zero, and so are elevation and z in the plane.
const (
	RangeBearing Sense = iota + 1 // with the elevation in space
	Range
	Bearing // with the elevation in space
	Position
)

// Measures tells which components of the residual a sense has, among poses of dim numbers, 3 or 6.
func (s Sense) Measures(dim int) [3]bool {
	space := dim == 6
	switch s {
	case RangeBearing, Position:
		return [3]bool{true, true, space}
	case Range:
		return [3]bool{true, false, false}
	case Bearing:
		return [3]bool{false, true, space}
	}
	panic("posegraph: unknown sense")
}

// Sightings is a batch of factors in which a sensor on pose From sees something: a point of the graph, or a spot on another robot. The
// bearing is counted in the x-y plane of the sensor from x towards y, the elevation from that plane towards z.
type Sightings struct {
	g        *Graph
	sense    Sense
	ofPoints bool
	From     []int32
	To       []int32      // a point (not its variable), or the pose of the robot seen
	Mount    []lie.SE3    // the sensor in the frame of From
	Spot     [][3]float64 // what is seen in the frame of To; zero for points
	Z        [][3]float64 // the measurement, in the components of the residual
	info     []lie.Mat3
	W        []float64 // weight of each factor, 1 unless a robust method changed it
	slots    []Slot
}

// AddSightings appends an empty batch of sightings of points to g and returns it.
func (g *Graph) AddSightings(sense Sense) *Sightings {
	s := &Sightings{g: g, sense: sense, ofPoints: true}
	g.Sets = append(g.Sets, s)
	return s
}

// AddEncounters appends an empty batch of sightings of robots to g and returns it.
func (g *Graph) AddEncounters(sense Sense) *Sightings {
	s := g.AddSightings(sense)
	s.ofPoints = false
	return s
}

// Add appends a sighting with its information matrix, 3 x 3 row-major in the components of the residual; entries of what the sense
// does not measure are not used.
func (s *Sightings) Add(from, to int32, mount lie.SE3, spot, z [3]float64, info *lie.Mat3) {
	m, has := *info, s.sense.Measures(s.g.Dim)
	for r := 0; r < 3; r++ {
		for c := 0; c < 3; c++ {
			if !has[r] || !has[c] {
				m[3*r+c] = 0
			}
		}
	}
	s.From, s.To = append(s.From, from), append(s.To, to)
	s.Mount, s.Spot = append(s.Mount, mount), append(s.Spot, spot)
	s.Z, s.info, s.W = append(s.Z, z), append(s.info, m), append(s.W, 1)
}

// Len returns the number of sightings.
func (s *Sightings) Len() int { return len(s.From) }

// Sense returns what the sightings measure.
func (s *Sightings) Sense() Sense { return s.sense }

// OfPoints tells whether points are seen, else robots.
func (s *Sightings) OfPoints() bool { return s.ofPoints }

// Info returns the information matrix of sighting k; it may be written.
func (s *Sightings) Info(k int) *lie.Mat3 { return &s.info[k] }

// Freedoms returns how many components sighting k has measured.
func (s *Sightings) Freedoms(k int) (n int) {
	for i := range 3 {
		if s.info[k][4*i] > 0 {
			n++
		}
	}
	return n
}

// target returns the variable that sighting k sees.
func (s *Sightings) target(k int) int32 {
	if s.ofPoints {
		return s.g.Point(s.To[k])
	}
	return s.To[k]
}

// seen returns where sighting k has what it sees, in the frame of its pose From.
func (s *Sightings) seen(k int, v *Values) [3]float64 {
	x := &v.Poses[s.From[k]]
	var p [3]float64
	if s.ofPoints {
		p = v.Points[s.To[k]]
	} else {
		p = v.Poses[s.To[k]].Apply(s.Spot[k])
	}
	return toFrame(x, p)
}

// toFrame returns R'(p - t).
func toFrame(x *lie.SE3, p [3]float64) [3]float64 {
	d := minus(p, x.T)
	r := &x.R
	return [3]float64{
		r[0]*d[0] + r[3]*d[1] + r[6]*d[2],
		r[1]*d[0] + r[4]*d[1] + r[7]*d[2],
		r[2]*d[0] + r[5]*d[1] + r[8]*d[2],
	}
}

// Residual returns what sighting k should have measured less what it did, angles within half a turn.
func (s *Sightings) Residual(k int, v *Values) [3]float64 {
	r, _ := s.evaluate(k, s.seen(k, v), false)
	return r
}

// nearest is the range below which bearings say nothing: derivatives are cut off there.
const nearest = 1e-6

// evaluate returns the residual of sighting k of something at u in the frame of its pose and, if wanted, its derivative by u.
func (s *Sightings) evaluate(k int, u [3]float64, derive bool) (r [3]float64, a lie.Mat3) {
	q := toFrame(&s.Mount[k], u)
	z, has := &s.Z[k], s.sense.Measures(s.g.Dim)
	if s.sense == Position {
		for i := range r {
			if has[i] {
				r[i], a[4*i] = q[i]-z[i], 1
			}
		}
	} else {
		if !has[2] && s.g.Dim == 3 {
			q[2] = 0
		}
		flat2 := q[0]*q[0] + q[1]*q[1]
		rho2 := flat2 + q[2]*q[2]
		flat, rho := math.Sqrt(flat2), math.Sqrt(rho2)
		if has[0] {
			r[0] = rho - z[0]
			rho := math.Max(rho, nearest)
			a[0], a[1], a[2] = q[0]/rho, q[1]/rho, q[2]/rho
		}
		if has[1] {
			r[1] = math.Remainder(math.Atan2(q[1], q[0])-z[1], 2*math.Pi)
			f := math.Max(flat2, nearest*nearest)
			a[3], a[4] = -q[1]/f, q[0]/f
		}
		if has[2] {
			r[2] = math.Remainder(math.Atan2(q[2], flat)-z[2], 2*math.Pi)
			f, n := math.Max(rho2, nearest*nearest), math.Max(flat, nearest)
			a[6], a[7], a[8] = -q[0]*q[2]/(n*f), -q[1]*q[2]/(n*f), flat/f
		}
	}
	if derive {
		a = a.Mul(s.Mount[k].R.T())
	}
	return r, a
}

// Chi2 returns r' Omega r of sighting k, without its weight.
func (s *Sightings) Chi2(k int, v *Values) float64 {
	r := s.Residual(k, v)
	or := s.info[k].Apply(r)
	return r[0]*or[0] + r[1]*or[1] + r[2]*or[2]
}

// Couplings implements [FactorSet].
func (s *Sightings) Couplings(emit func(i, j int32)) {
	for k := range s.From {
		emit(s.From[k], s.target(k))
	}
}

// Bind implements [FactorSet].
func (s *Sightings) Bind(next func() Slot) {
	s.slots = make([]Slot, len(s.From))
	for k := range s.slots {
		s.slots[k] = next()
	}
}

// Cost implements [FactorSet].
func (s *Sightings) Cost(v *Values) float64 {
	sum := 0.0
	for k := range s.From {
		if s.W[k] != 0 {
			sum += s.W[k] * s.Chi2(k, v)
		}
	}
	return sum / 2
}

// sighted is the linearisation of one sighting: blocks row-major, as wide as the variables.
type sighted struct {
	di, dj        int // scalars of From, of To
	hii, hij, hjj [36]float64
	gi, gj        [6]float64
}

// linearise fills f for sighting k with weight w and returns r' Omega r without it. With u the place seen in the frame of From and A
// the derivative of r by u, the derivatives are
//
//	by pose From A [-I, skew(u)], by a point A R_i', by the pose of a robot A R_ij [I, -skew(spot)].
func (s *Sightings) linearise(k int, v *Values, w float64, f *sighted) float64 {
	r, a := s.evaluate(k, s.seen(k, v), true)
	or := s.info[k].Apply(r)
	chi2 := r[0]*or[0] + r[1]*or[1] + r[2]*or[2]
	at := a.T()
	G := at.Mul(s.info[k]).Mul(a)
	g := at.Apply(or)
	for i := range G {
		G[i] *= w
	}
	for i := range g {
		g[i] *= w
	}
	var li, lj [18]float64
	f.di, f.dj = s.spreads(k, v, &li, &lj)
	gram(f.hii[:], &li, f.di, &G, &li, f.di)
	gram(f.hij[:], &li, f.di, &G, &lj, f.dj)
	gram(f.hjj[:], &lj, f.dj, &G, &lj, f.dj)
	for c := 0; c < f.di; c++ {
		f.gi[c] = li[c]*g[0] + li[f.di+c]*g[1] + li[2*f.di+c]*g[2]
	}
	for c := 0; c < f.dj; c++ {
		f.gj[c] = lj[c]*g[0] + lj[f.dj+c]*g[1] + lj[2*f.dj+c]*g[2]
	}
	return chi2
}

// spreads writes the derivatives of the place seen, in the frame of From, by the tangents of From and of what is seen, and returns
// their widths.
func (s *Sightings) spreads(k int, v *Values, li, lj *[18]float64) (di, dj int) {
	dim := s.g.Dim
	spread(li, dim, &lie.Mat3{-1, 0, 0, 0, -1, 0, 0, 0, -1}, s.seen(k, v))
	rt := v.Poses[s.From[k]].R.T()
	if s.ofPoints {
		copy(lj[:], rt[:])
		if dim == 3 {
			lj[2], lj[5], lj[8] = 0, 0, 0
		}
		return dim, 3
	}
	m := rt.Mul(v.Poses[s.To[k]].R)
	spread(lj, dim, &m, s.Spot[k])
	return dim, dim
}

// spread writes m [I, -skew(p)]; in the plane the columns x, y, rz are kept.
func spread(l *[18]float64, dim int, m *lie.Mat3, p [3]float64) {
	turn := m.Mul(lie.Skew(p))
	for r := 0; r < 3; r++ {
		if dim == 3 {
			l[3*r], l[3*r+1], l[3*r+2] = m[3*r], m[3*r+1], -turn[3*r+2]
			continue
		}
		for c := 0; c < 3; c++ {
			l[6*r+c], l[6*r+3+c] = m[3*r+c], -turn[3*r+c]
		}
	}
}

// gram writes a' G b, da x db; a and b have three rows.
func gram(out []float64, a *[18]float64, da int, G *lie.Mat3, b *[18]float64, db int) {
	var gb [18]float64
	for c := 0; c < db; c++ {
		x, y, z := b[c], b[db+c], b[2*db+c]
		gb[c] = G[0]*x + G[1]*y + G[2]*z
		gb[db+c] = G[3]*x + G[4]*y + G[5]*z
		gb[2*db+c] = G[6]*x + G[7]*y + G[8]*z
	}
	for r := 0; r < da; r++ {
		x, y, z := a[r], a[da+r], a[2*da+r]
		for c := 0; c < db; c++ {
			out[r*db+c] = x*gb[c] + y*gb[db+c] + z*gb[2*db+c]
		}
	}
}

// Linearise implements [FactorSet].
func (s *Sightings) Linearise(v *Values, a *Assembly) float64 {
	cost := 0.0
	var f sighted
	for k := range s.From {
		w := s.W[k]
		if w == 0 {
			continue
		}
		cost += w * s.linearise(k, v, w, &f)
		i, j := s.From[k], s.target(k)
		if d := a.Diag(i); d != nil {
			accumulate(d, f.hii[:])
			accumulate(a.Grad(i)[:f.di], f.gi[:])
		}
		if d := a.Diag(j); d != nil {
			accumulate(d, f.hjj[:])
			accumulate(a.Grad(j)[:f.dj], f.gj[:])
		}
		addOff(a, s.slots[k], f.hij[:], f.di, f.dj)
	}
	return cost / 2
}

// accumulate adds b to a, as long as a.
func accumulate(a, b []float64) {
	for i := range a {
		a[i] += b[i]
	}
}

// addOff adds the block h of rows i and columns j, di x dj, to where a slot says.
func addOff(a *Assembly, slot Slot, h []float64, di, dj int) {
	switch {
	case slot > 0:
		accumulate(a.Matrix.Off(int(slot-1)), h)
	case slot < 0:
		m := a.Matrix.Off(int(-slot - 1))
		for r := 0; r < di; r++ {
			for c := 0; c < dj; c++ {
				m[c*di+r] += h[r*dj+c]
			}
		}
	}
}

// Quadratic writes the second-order model of sighting k at v to h ((Dim + n)^2, row-major) and g (Dim + n), over the tangents of
// pose From, then of what is seen, n being 3 for a point and Dim for a robot. The unit pivot of a planar point is part of it.
func (s *Sightings) Quadratic(k int, v *Values, h, g []float64) {
	var f sighted
	s.linearise(k, v, s.W[k], &f)
	n := f.di + f.dj
	for r := 0; r < f.di; r++ {
		copy(h[r*n:], f.hii[r*f.di:(r+1)*f.di])
		copy(h[r*n+f.di:], f.hij[r*f.dj:(r+1)*f.dj])
		for c := 0; c < f.dj; c++ {
			h[(f.di+c)*n+r] = f.hij[r*f.dj+c]
		}
	}
	for r := 0; r < f.dj; r++ {
		copy(h[(f.di+r)*n+f.di:], f.hjj[r*f.dj:(r+1)*f.dj])
	}
	if s.ofPoints && s.g.Dim == 3 {
		h[n*n-1] = 1
	}
	copy(g, f.gi[:f.di])
	copy(g[f.di:], f.gj[:f.dj])
}
