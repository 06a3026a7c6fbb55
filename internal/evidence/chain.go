package evidence

import (
	"math"

	"selvage/internal/lie"
)

// Chain is the track of one session as its odometry has it, made ready to say how one keyframe lies to another at once: running
// sums carry the covariance and the effect of a heading bias from the first keyframe on, and the difference of two sums is that of
// the leg between. All of it is taken at the dead-reckoned poses, so that no loop closure, true or false, bends the measure that
// closures are judged by.
type Chain struct {
	dim    int
	step   []lie.SE3 // into each keyframe from the one before
	noise  []cov     // of the step, in its own tangent
	length []float64 // metres
	part   []bool    // no odometry leads into this keyframe: another part of the track begins

	bias   float64 // of the heading, radians per metre, that the poses are cleared of
	ready  int     // keyframes for which the running sums hold
	pose   []lie.SE3
	travel []float64
	begin  []int         // first keyframe of the part
	sum    []cov         // of the covariances, perturbed on the left
	turn   []lie.Tangent // what a heading bias of one radian per metre does, perturbed on the left
}

// NewChain returns the chain of a session without keyframes; dim is 2 or 3.
func NewChain(dim int) *Chain { return &Chain{dim: dim} }

// Len returns the number of keyframes.
func (c *Chain) Len() int { return len(c.step) }

// Keyframe adds a keyframe; step is where the front end has it, seen from the keyframe before.
func (c *Chain) Keyframe(step lie.SE3) {
	c.step = append(c.step, step)
	c.noise = append(c.noise, cov{})
	c.length = append(c.length, distance(step.T, [3]float64{}))
	c.part = append(c.part, true)
}

// Odometry takes a measurement Z of the pose of one keyframe seen from its neighbour on the track, with its information (6 x 6
// row-major; in the plane rows and columns 0, 1 and 5). One that joins no neighbours, or leaves a component free, says nothing here.
func (c *Chain) Odometry(from, to int, z lie.SE3, info *[36]float64) {
	k := max(from, to)
	if k-min(from, to) != 1 {
		return
	}
	noise, ok := covarianceOf(info, c.dim, 0)
	for i := 0; i < 9; i += 4 {
		ok = ok && noise.P[i] < 1/vague && noise.S[i] < 1/vague
	}
	if !ok {
		return
	}
	if from > to {
		z = z.Inv()
		noise = noise.carry(&z)
	}
	c.step[k], c.noise[k], c.part[k] = z, noise, false
	c.length[k] = distance(z.T, [3]float64{})
	c.ready = min(c.ready, k)
}

// covarianceOf inverts an information matrix and tells whether it can. With least above 0 the diagonal grows by that and by 1e-8 of itself,
// so that an information of lower rank, known to 1e-9 of its diagonal, can be inverted too.
func covarianceOf(info *[36]float64, dim int, least float64) (cov, bool) {
	index := [6]int{0, 1, 2, 3, 4, 5}
	if dim == 2 {
		index = [6]int{0, 1, 5}
	}
	omega := covOf(info, dim)
	var m, full [36]float64
	d := omega.dense(dim, &m)
	for i := 0; i < d; i++ {
		if least > 0 {
			m[(d+1)*i] += least + 1e-8*m[(d+1)*i]
		}
	}
	if !invert(&m, d) {
		return cov{}, false
	}
	for i := 0; i < d; i++ {
		for j := 0; j < d; j++ {
			full[6*index[i]+index[j]] = m[d*i+j]
		}
	}
	return covOf(&full, dim), true
}

// prepare brings the running sums up to date, at the poses dead-reckoned without the given heading bias.
func (c *Chain) prepare(bias float64) {
	if bias != c.bias {
		c.bias, c.ready = bias, 0
	}
	n := len(c.step)
	c.pose, c.travel, c.begin = c.pose[:c.ready], c.travel[:c.ready], c.begin[:c.ready]
	c.sum, c.turn = c.sum[:c.ready], c.turn[:c.ready]
	for k := c.ready; k < n; k++ {
		x, m, begin := lie.Identity(), 0.0, 0
		var sum cov
		var turn lie.Tangent
		if k > 0 {
			half := c.length[k] / 2
			back := lie.Exp(lie.Tangent{5: -bias * half})
			x = c.pose[k-1].Mul(back).Mul(c.step[k]).Mul(back).Plus(lie.Tangent{}) // clean of rounding
			m, sum, turn, begin = c.travel[k-1]+c.length[k], c.sum[k-1], c.turn[k-1], c.begin[k-1]
			if c.part[k] {
				begin = k
			}
			inv := x.Inv()
			left := c.noise[k].carry(&inv)
			sum.add(&left)
			for _, p := range [2]*lie.SE3{&c.pose[k-1], &x} { // a bias turns the track about its up axis, all along the step
				up := [3]float64{p.R[2] * half, p.R[5] * half, p.R[8] * half}
				shift := cross(p.T, up)
				for i := range up {
					turn[i] += shift[i]
					turn[i+3] += up[i]
				}
			}
		}
		c.pose, c.travel, c.begin = append(c.pose, x), append(c.travel, m), append(c.begin, begin)
		c.sum, c.turn = append(c.sum, sum), append(c.turn, turn)
	}
	c.ready = n
}

// joined tells whether odometry leads from keyframe i to keyframe j.
func (c *Chain) joined(i, j int) bool { return c.begin[i] == c.begin[j] }

// way is the product of the legs of a walk, with what a heading bias of one radian per metre does to it, in the tangent at its end.
type way struct {
	path
	turn   lie.Tangent
	length float64 // metres on the track
}

// start returns the walk that stays where it is.
func start() way { return way{path: path{x: lie.Identity()}} }

// along extends the walk by the leg from keyframe i to keyframe j.
func (w *way) along(c *Chain, i, j int) {
	if i == j {
		return
	}
	y := c.pose[i].Between(c.pose[j])
	lo, hi := min(i, j), max(i, j)
	sum, low := c.sum[hi], &c.sum[lo]
	for k := range sum.P {
		sum.P[k] -= low.P[k]
		sum.Q[k] -= low.Q[k]
		sum.S[k] -= low.S[k]
	}
	leg := sum.carry(&c.pose[j])
	turn := c.turn[j] // the other way round a bias turns the other way
	for k := range turn {
		turn[k] -= c.turn[i][k]
	}
	carried, own := shifted(&w.turn, &y), shifted(&turn, &c.pose[j])
	w.extend(&y, &leg)
	for k := range own {
		w.turn[k] = carried[k] + own[k]
	}
	w.length += math.Abs(c.travel[i] - c.travel[j])
}

// across extends the walk by a closure, forwards or backwards.
func (w *way) across(l *link, back bool) {
	z, c := l.z, l.c
	if back {
		z = l.z.Inv()
		c = l.c.carry(&z)
	}
	w.turn = shifted(&w.turn, &z)
	w.extend(&z, &c)
}

// shifted returns Ad(Y^-1) v.
func shifted(v *lie.Tangent, y *lie.SE3) lie.Tangent {
	m := cross(y.T, [3]float64{v[3], v[4], v[5]})
	rt := y.R.T()
	t := rt.Apply([3]float64{v[0] - m[0], v[1] - m[1], v[2] - m[2]})
	r := rt.Apply([3]float64{v[3], v[4], v[5]})
	return lie.Tangent{t[0], t[1], t[2], r[0], r[1], r[2]}
}
