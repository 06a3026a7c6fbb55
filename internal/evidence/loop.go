package evidence

import (
	"math"

	"selvage/internal/lie"
)

// cov is a 6 x 6 covariance in blocks [[P Q] [Q' S]]: P translation, S rotation.
type cov struct{ P, Q, S lie.Mat3 }

func covOf(m *[36]float64, dim int) (c cov) {
	if dim == 2 {
		c.P = lie.Mat3{m[0], m[1], 0, m[6], m[7], 0, 0, 0, 0}
		c.Q = lie.Mat3{0, 0, m[5], 0, 0, m[11], 0, 0, 0}
		c.S = lie.Mat3{0, 0, 0, 0, 0, 0, 0, 0, m[35]}
		return c
	}
	for i := 0; i < 3; i++ {
		for j := 0; j < 3; j++ {
			c.P[3*i+j] = m[6*i+j]
			c.Q[3*i+j] = m[6*i+j+3]
			c.S[3*i+j] = m[6*(i+3)+j+3]
		}
	}
	return c
}

func (c *cov) add(d *cov) {
	for i := range c.P {
		c.P[i] += d.P[i]
		c.Q[i] += d.Q[i]
		c.S[i] += d.S[i]
	}
}

func (c *cov) scale(f float64) {
	for i := range c.P {
		c.P[i] *= f
		c.Q[i] *= f
		c.S[i] *= f
	}
}

// carry returns Ad(Y^-1) c Ad(Y^-1)': the covariance of a perturbation left of the leg Y, seen from its right.
func (c *cov) carry(y *lie.SE3) cov {
	// Ad(Y^-1) = [[R' 0] [0 R']] [[I -K] [0 I]], K = Skew(t).
	k := lie.Skew(y.T)
	ks := k.Mul(c.S)
	var p, q lie.Mat3
	for i := range q {
		q[i] = c.Q[i] - ks[i]
	}
	// P - K Q' - Q K' + K S K' = P - (K Q') + q K, since K' = -K and q = Q - K S.
	kq, qk := k.Mul(c.Q.T()), q.Mul(k)
	for i := range p {
		p[i] = c.P[i] - kq[i] + qk[i]
	}
	rt := y.R.T()
	return cov{rt.Mul(p).Mul(y.R), rt.Mul(q).Mul(y.R), rt.Mul(c.S).Mul(y.R)}
}

// addOuter adds s s' times w.
func (c *cov) addOuter(s *lie.Tangent, w float64) {
	for i := 0; i < 3; i++ {
		for j := 0; j < 3; j++ {
			c.P[3*i+j] += w * s[i] * s[j]
			c.Q[3*i+j] += w * s[i] * s[j+3]
			c.S[3*i+j] += w * s[i+3] * s[j+3]
		}
	}
}

// dense writes c as a D x D matrix over the tangent components of the dimension and returns D.
func (c *cov) dense(dim int, m *[36]float64) int {
	if dim == 2 {
		*m = [36]float64{c.P[0], c.P[1], c.Q[2], c.P[1], c.P[4], c.Q[5], c.Q[2], c.Q[5], c.S[8]}
		return 3
	}
	for i := 0; i < 3; i++ {
		for j := 0; j < 3; j++ {
			m[6*i+j] = c.P[3*i+j]
			m[6*i+j+3] = c.Q[3*i+j]
			m[6*(j+3)+i] = c.Q[3*i+j]
			m[6*(i+3)+j+3] = c.S[3*i+j]
		}
	}
	return 6
}

// mahalanobis returns e' C^-1 e; +Inf if C is not positive definite.
func mahalanobis(e *lie.Tangent, c *cov, dim int) float64 {
	var m [36]float64
	n := c.dense(dim, &m)
	var x [6]float64
	pick(e, dim, &x)
	sum := 0.0
	for j := 0; j < n; j++ { // Cholesky, with the forward substitution along
		d, y := m[n*j+j], x[j]
		for k := 0; k < j; k++ {
			d -= m[n*j+k] * m[n*j+k]
			y -= m[n*j+k] * x[k]
		}
		if !(d > 0) {
			return math.Inf(1)
		}
		d = math.Sqrt(d)
		x[j] = y / d
		sum += x[j] * x[j]
		for i := j + 1; i < n; i++ {
			v := m[n*i+j]
			for k := 0; k < j; k++ {
				v -= m[n*i+k] * m[n*j+k]
			}
			m[n*i+j] = v / d
		}
	}
	return sum
}

func pick(e *lie.Tangent, dim int, x *[6]float64) {
	if dim == 2 {
		*x = [6]float64{e[0], e[1], e[5]}
		return
	}
	*x = *e
}

// track is a unit prepared for loops: running sums that give the effect of a heading bias between any two nodes at once.
type track struct {
	*Unit
	dim  int
	bias float64

	// axis[k] is the integral of the up axis along the track up to node k, in metres, moment[k] that of axis x position.
	axis, moment [][3]float64
}

func newTrack(u *Unit, o *Options) *track {
	n := len(u.Poses)
	t := &track{Unit: u, dim: o.Dim, bias: o.BiasYaw, axis: make([][3]float64, n), moment: make([][3]float64, n)}
	for k := 1; k < n; k++ {
		a, b := &u.Poses[k-1], &u.Poses[k]
		h := (u.TravelM[k] - u.TravelM[k-1]) / 2
		up := [3]float64{h * (a.R[2] + b.R[2]), h * (a.R[5] + b.R[5]), h * (a.R[8] + b.R[8])}
		mid := [3]float64{(a.T[0] + b.T[0]) / 2, (a.T[1] + b.T[1]) / 2, (a.T[2] + b.T[2]) / 2}
		m := cross(up, mid)
		for c := 0; c < 3; c++ {
			t.axis[k][c] = t.axis[k-1][c] + up[c]
			t.moment[k][c] = t.moment[k-1][c] + m[c]
		}
	}
	return t
}

func cross(a, b [3]float64) [3]float64 {
	return [3]float64{a[1]*b[2] - a[2]*b[1], a[2]*b[0] - a[0]*b[2], a[0]*b[1] - a[1]*b[0]}
}

// leg returns the pose X_i^-1 X_j with its covariance, the bias included.
//
// A heading bias of s per metre turns the track about the up axis z_k at every place p_k; node j moves by the integral of
// z_k x (p_j - p_k), and turns by that of z_k. Between nodes the track is taken as straight.
func (t *track) leg(i, j int) (lie.SE3, cov) {
	y := t.Poses[i].Between(t.Poses[j])
	if i == j {
		return y, cov{}
	}
	lo, hi := min(i, j), max(i, j)
	m := t.Covariance(lo, hi)
	c := covOf(&m, t.dim)
	x := &t.Poses[hi]
	var turn, shift [3]float64
	for k := 0; k < 3; k++ {
		turn[k] = t.axis[hi][k] - t.axis[lo][k]
	}
	shift = cross(turn, x.T)
	for k := 0; k < 3; k++ {
		shift[k] -= t.moment[hi][k] - t.moment[lo][k]
	}
	rt := x.R.T()
	shift, turn = rt.Apply(shift), rt.Apply(turn)
	c.addOuter(&lie.Tangent{shift[0], shift[1], shift[2], turn[0], turn[1], turn[2]}, t.bias*t.bias)
	if i > j {
		c = c.carry(&y) // (P Exp(xi))^-1 = P^-1 Exp(-Ad(P) xi), and y is P^-1
	}
	return y, c
}

// link is a tie turned so that it leads from the lower unit to the higher.
type link struct {
	a, b int // units, a < b
	i, j int // nodes
	z    lie.SE3
	c    cov
}

func linkOf(t *Tie, dim int) link {
	c := covOf(&t.Cov, dim)
	if t.From.Unit < t.To.Unit {
		return link{t.From.Unit, t.To.Unit, t.From.Node, t.To.Node, t.Z, c}
	}
	z := t.Z.Inv()
	return link{t.To.Unit, t.From.Unit, t.To.Node, t.From.Node, z, c.carry(&z)}
}

// path is the product of the legs of a walk with its covariance, in the tangent at its end.
type path struct {
	x lie.SE3
	c cov
}

func (p *path) extend(y *lie.SE3, c *cov) {
	p.c = p.c.carry(y)
	p.c.add(c)
	p.x = p.x.Mul(*y)
}

// detour is the walk from node i of l's first unit to node j of its second that l spares, through the tie m of the same pair.
func detour(a, b *track, l, m *link) path {
	var p path
	p.x, p.c = a.leg(l.i, m.i)
	p.extend(&m.z, &m.c)
	y, c := b.leg(m.j, l.j)
	p.extend(&y, &c)
	return p
}

// misclosure returns the logarithm of z^-1 p and its covariance: that of p and of the tie itself, carried around the loop.
func (p *path) misclosure(l *link) (lie.Tangent, cov) {
	e := l.z.Between(p.x)
	c := l.c.carry(&e)
	c.add(&p.c)
	return e.Log(), c
}
