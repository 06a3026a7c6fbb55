package posegraph

import (
	"math"

	"selvage/internal/lie"
)

// Levels is a batch of factors that know the vertical: a pose saw up, a unit vector in its own frame, within sigma radians. The residual
// is the tilt of R'z against it, two components across up. It is indifferent to the heading and to where the pose is; the frame of the
// poses must be level. Only for poses in space.
type Levels struct {
	Pose  []int32
	up    [][3]float64
	basis []lie.Mat3 // rows 0 and 1 are across up, row 2 is zero
	info  []float64
}

// AddLevels appends an empty batch of levels to g and returns it.
func (g *Graph) AddLevels() *Levels {
	if g.Dim != 6 {
		panic("posegraph: there is nothing to level in the plane")
	}
	l := &Levels{}
	g.Sets = append(g.Sets, l)
	return l
}

// Add says that a pose saw up, a vector of length 1, within sigma radians.
func (l *Levels) Add(pose int32, up [3]float64, sigma float64) {
	least := 0
	for i := range up {
		if math.Abs(up[i]) < math.Abs(up[least]) {
			least = i
		}
	}
	var axis [3]float64
	axis[least] = 1
	a := cross(up, axis)
	n := length(a)
	for i := range a {
		a[i] /= n
	}
	b := cross(up, a)
	l.Pose, l.up, l.info = append(l.Pose, pose), append(l.up, up), append(l.info, 1/(sigma*sigma))
	l.basis = append(l.basis, lie.Mat3{a[0], a[1], a[2], b[0], b[1], b[2]})
}

// Len returns the number of levels.
func (l *Levels) Len() int { return len(l.Pose) }

// Couplings implements [FactorSet]: a level couples nothing.
func (l *Levels) Couplings(func(i, j int32)) {}

// Bind implements [FactorSet].
func (l *Levels) Bind(func() Slot) {}

// residual returns the tilt and R'z. The tilt is counted as an angle, so that a pose upside down is not taken for a level one.
func (l *Levels) residual(k int, v *Values) (r [2]float64, down [3]float64) {
	m := &v.Poses[l.Pose[k]].R
	down = [3]float64{m[6], m[7], m[8]}
	t := l.basis[k].Apply(down)
	f := l.stretch(k, down)
	return [2]float64{f * t[0], f * t[1]}, down
}

// stretch is the angle between R'z and up over its sine.
func (l *Levels) stretch(k int, z [3]float64) float64 {
	u := &l.up[k]
	cos := u[0]*z[0] + u[1]*z[1] + u[2]*z[2]
	sin := length(cross(*u, z))
	if sin < 1e-9 {
		if cos > 0 {
			return 1
		}
		return math.Pi / math.Max(sin, 1e-12)
	}
	return math.Atan2(sin, cos) / sin
}

// Cost implements [FactorSet].
func (l *Levels) Cost(v *Values) float64 {
	sum := 0.0
	for k := range l.Pose {
		r, _ := l.residual(k, v)
		sum += l.info[k] * (r[0]*r[0] + r[1]*r[1])
	}
	return sum / 2
}

// Linearise implements [FactorSet]. With w = R'z, R <- R Exp(phi) moves w by w x phi, t = B w by B skew(w) phi, the tilt r = f t by
// f dt + t df, and df = f' dc where c = up'w, f = acos(c)/sin, f' = (c f - 1)/sin^2.
func (l *Levels) Linearise(v *Values, a *Assembly) float64 {
	sum := 0.0
	for k := range l.Pose {
		r, w := l.residual(k, v)
		sum += l.info[k] * (r[0]*r[0] + r[1]*r[1])
		d := a.Diag(l.Pose[k])
		if d == nil {
			continue
		}
		t := l.basis[k].Apply(w)
		turn := lie.Skew(w)
		j := l.basis[k].Mul(turn)
		u := l.up[k]
		c := u[0]*w[0] + u[1]*w[1] + u[2]*w[2]
		f, s2 := l.stretch(k, w), t[0]*t[0]+t[1]*t[1]
		df := -1.0 / 3
		if s2 > 1e-8 {
			df = (c*f - 1) / s2
		}
		dc := turn.T().Apply(u) // c moves by up' skew(w) phi
		var J [2][3]float64
		for i := range 2 {
			for m := range 3 {
				J[i][m] = f*j[3*i+m] + t[i]*df*dc[m]
			}
		}
		g := a.Grad(l.Pose[k])
		for m := range 3 {
			g[3+m] += l.info[k] * (J[0][m]*r[0] + J[1][m]*r[1])
			for n := range 3 {
				d[6*(3+m)+3+n] += l.info[k] * (J[0][m]*J[0][n] + J[1][m]*J[1][n])
			}
		}
	}
	return sum / 2
}
