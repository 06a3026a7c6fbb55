package evidence

import (
	"math"

	"selvage/internal/lie"
)

// witnesses is how many independent ways around are combined into one prediction.
const witnesses = 3

// prediction is where the ties held put a tie.
type prediction struct {
	squared float64 // squared Mahalanobis distance of the tie from it
	share   float64 // part of all possible poses that would have passed
	ways    int
}

// predict combines the ways around tie t: through ties of its own pair at other places, the nearest first, and if these are
// fewer than two, through other units.
func (b *body) predict(t int, same []int, a *atlas) prediction {
	l := &b.links[t]
	var e [witnesses]lie.Tangent
	var c [witnesses]cov
	n := 0
	var used [witnesses]int
	for n < witnesses {
		best, cost := -1, math.Inf(1)
	next:
		for _, x := range same {
			if x == t || !b.apart(x, t) {
				continue
			}
			m := &b.links[x]
			d := math.Abs(b.tracks[l.a].TravelM[l.i]-b.tracks[l.a].TravelM[m.i]) + math.Abs(b.tracks[l.b].TravelM[l.j]-b.tracks[l.b].TravelM[m.j])
			if d >= cost {
				continue
			}
			for _, y := range used[:n] {
				if !b.apart(x, y) {
					continue next
				}
			}
			best, cost = x, d
		}
		if best < 0 {
			break
		}
		used[n] = best
		e[n], c[n] = b.around(l, []int{best})
		n++
	}
	if n < 2 {
		if ties, ok := a.walk(l, b.sibling(l)); ok {
			e[n], c[n] = b.around(l, ties)
			n++
		}
	}
	if n == 0 {
		return prediction{}
	}
	x, d := e[0], c[0]
	if n > 1 {
		x, d = fuse(e[:n], c[:n], b.o.Dim)
	}
	return b.against(l, &x, d, n)
}

// against tests tie l against a way around with misclosure e and covariance c, to which the tie's own is added.
func (b *body) against(l *link, e *lie.Tangent, c cov, ways int) prediction {
	z := lie.Exp(*e)
	own := l.c.carry(&z)
	c.add(&own)
	return prediction{mahalanobis(e, &c, b.o.Dim), b.share(&c, l.a, l.b), ways}
}

// crossing tests tie t against the shortest way through other units, if there is one, and returns the ties of that way. Ties of one pair may all be wrong alike:
// an aisle taken for its neighbour gives false ties at many places, which bear each other out.
func (b *body) crossing(t int, a *atlas) (prediction, []int) {
	l := &b.links[t]
	ties, ok := a.walk(l, b.sibling(l))
	if !ok {
		return prediction{}, nil
	}
	e, c := b.around(l, ties)
	return b.against(l, &e, c, 1), ties
}

// sibling returns a test for ties of the same pair as l.
func (b *body) sibling(l *link) func(t int) bool {
	return func(t int) bool { return b.links[t].a == l.a && b.links[t].b == l.b }
}

// refusal is the squared distance from which on prediction p refuses. From further off it leans on the model of the drift, and
// refuses only what is out of the question: at twice the distance.
func (b *body) refusal(p *prediction) float64 {
	if p.share > nearby {
		return 4 * b.refuse
	}
	return b.refuse
}

// nearby is the share up to which a prediction counts as one from nearby.
const nearby = 1e-4

// around returns the misclosure of l against a walk, with the covariance of the walk alone.
func (b *body) around(l *link, ties []int) (lie.Tangent, cov) {
	p := b.through(l, ties)
	e := l.z.Between(p.x)
	return e.Log(), p.c
}

// fuse returns the weighted mean of independent vectors and its covariance. Ways that contradict each other show that their
// covariances promise too much: the result is scaled by the variance factor if that is above 1.
func fuse(e []lie.Tangent, c []cov, dim int) (lie.Tangent, cov) {
	n, index := 6, [6]int{0, 1, 2, 3, 4, 5}
	if dim == 2 {
		n, index = 3, [6]int{0, 1, 5}
	}
	var sum, m [36]float64
	var rhs, x [6]float64
	for k := range e {
		c[k].dense(dim, &m)
		if !invert(&m, n) {
			return e[0], c[0]
		}
		pick(&e[k], dim, &x)
		for i := 0; i < n; i++ {
			for j := 0; j < n; j++ {
				sum[n*i+j] += m[n*i+j]
				rhs[i] += m[n*i+j] * x[j]
			}
		}
	}
	if !invert(&sum, n) {
		return e[0], c[0]
	}
	var mean lie.Tangent
	for i := 0; i < n; i++ {
		for j := 0; j < n; j++ {
			mean[index[i]] += sum[n*i+j] * rhs[j]
		}
	}
	factor := 0.0
	for k := range e {
		d := e[k]
		for i := range d {
			d[i] -= mean[i]
		}
		factor += mahalanobis(&d, &c[k], dim)
	}
	factor = math.Max(1, factor/float64((len(e)-1)*n))
	var full [36]float64
	for i := 0; i < n; i++ {
		for j := 0; j < n; j++ {
			full[6*index[i]+index[j]] = factor * sum[n*i+j]
		}
	}
	return mean, covOf(&full, dim)
}

// invert replaces the symmetric n x n matrix in m by its inverse and reports whether it is positive definite (Gauss-Jordan; the
// pivots of a positive definite matrix need no search).
func invert(m *[36]float64, n int) bool {
	for k := 0; k < n; k++ {
		p := m[n*k+k]
		if !(p > 0) {
			return false
		}
		m[n*k+k] = 1
		for j := 0; j < n; j++ {
			m[n*k+j] /= p
		}
		for i := 0; i < n; i++ {
			if i == k {
				continue
			}
			f := m[n*i+k]
			m[n*i+k] = 0
			for j := 0; j < n; j++ {
				m[n*i+j] -= f * m[n*k+j]
			}
		}
	}
	return true
}
