package evidence

import (
	"math"
	"slices"

	"selvage/internal/lie"
)

// accident is the chance that two unrelated ties of the pair agree within the gate, taken as the geometric mean over the
// neighbouring places of h; 1 for a single place.
func (b *body) accident(h *hypothesis) float64 {
	if len(h.spots) < 2 {
		return 1
	}
	sum := 0.0
	for k := 1; k < len(h.spots); k++ {
		l := &b.links[h.spots[k]]
		d := detour(b.tracks[l.a], b.tracks[l.b], l, &b.links[h.spots[k-1]])
		_, c := d.misclosure(l)
		sum += math.Log(b.share(&c, l.a, l.b))
	}
	return math.Exp(sum / float64(len(h.spots)-1))
}

// share is the part of the poses possible between units u and v that the gate of a misclosure with covariance c lets through.
// Only the horizontal components and the heading count: unrelated places may well have the same floor under them.
func (b *body) share(c *cov, u, v int) float64 {
	s, t := &b.spread[u], &b.spread[v]
	long, short := sides(s[0]+t[0], s[1]+t[1], s[2]+t[2])
	wide, narrow := sides(c.P[0], c.P[1], c.P[4])
	g := 2 * math.Sqrt(b.gate/12)
	wide, narrow = wide*g, narrow*g
	p := math.Max(
		math.Min(1, wide/long)*math.Min(1, narrow/short),
		math.Min(1, wide/short)*math.Min(1, narrow/long))
	return math.Max(1e-12, p*b.headings(u, v, math.Sqrt(b.gate*c.S[8])))
}

// sides returns the sides of the uniform rectangle with the second moments given.
func sides(xx, xy, yy float64) (long, short float64) {
	m, d := (xx+yy)/2, math.Hypot((xx-yy)/2, xy)
	return math.Sqrt(12 * math.Max(m+d, 1e-12)), math.Sqrt(12 * math.Max(m-d, 1e-12))
}

// headings is the chance that two unrelated pairs of nodes of u and v have the same relative heading within turn: 1/pi turn if
// all headings occur, but more where the tracks follow few directions.
func (b *body) headings(u, v int, turn float64) float64 {
	if turn >= math.Pi {
		return 1
	}
	s := b.relative(u, v)
	n := len(s)
	pairs, total := 0, n*(n-1)/2
	for i, hi := 0, 0; i < n; i++ { // s ascends in [0, 2 pi)
		for hi = max(hi, i); hi+1 < n && s[hi+1]-s[i] <= turn; {
			hi++
		}
		pairs += hi - i
		for k := 0; k < i && s[k]+2*math.Pi-s[i] <= turn; k++ {
			pairs++
		}
	}
	return math.Min(1, math.Max(turn/math.Pi, float64(pairs+1)/float64(total+1)))
}

// relative returns ascending headings, in [0, 2 pi), of nodes of v seen from nodes of u, drawn evenly.
func (b *body) relative(u, v int) []float64 {
	if b.yaw == nil {
		b.yaw = make([][]float64, len(b.tracks)*len(b.tracks))
	}
	at := u*len(b.tracks) + v
	if b.yaw[at] != nil {
		return b.yaw[at]
	}
	const side = 12
	s := make([]float64, 0, side*side)
	for i := 0; i < side; i++ {
		x := b.tracks[u].Poses
		for j := 0; j < side; j++ {
			y := b.tracks[v].Poses
			d := heading(&x[i*len(x)/side]) - heading(&y[j*len(y)/side])
			s = append(s, math.Mod(d+4*math.Pi, 2*math.Pi))
		}
	}
	slices.Sort(s)
	b.yaw[at] = s
	return s
}

func heading(x *lie.SE3) float64 { return math.Atan2(x.R[3], x.R[0]) }

// expected is the number of sets of k among m places that agree by accident with chance p, over all pairs looked at.
func expected(pairs, m, k int, p float64) float64 {
	if k < 1 || m < k {
		return float64(pairs)
	}
	a, _ := math.Lgamma(float64(m + 1))
	c, _ := math.Lgamma(float64(k + 1))
	d, _ := math.Lgamma(float64(m - k + 1))
	return float64(pairs) * math.Exp(a-c-d+float64(k-1)*math.Log(p))
}
