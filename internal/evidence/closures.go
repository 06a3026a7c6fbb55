package evidence

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"selvage/internal/lie"
)

// Closure is a loop closure within one session: the pose Z of keyframe To seen from From, with its information in its own tangent
// (row-major 6 x 6; in the plane rows and columns 0, 1 and 5; zero rows and columns for what was not measured).
type Closure struct {
	From, To int
	Z        lie.SE3
	Info     [36]float64
}

// vague is the information given to what a closure did not measure: a standard deviation of a kilometre, or of many turns.
const vague = 1e-6

// ClosureFinding is the verdict on one loop closure.
type ClosureFinding struct {
	Verdict Verdict
	Reason  string // in plain words
	// Statistic is the squared Mahalanobis distance of the closure from the shortest way round, with DoF degrees of freedom, and Limit
	// the bound it was held against: above it, it speaks against the closure. All are 0 when there is no way round.
	Statistic float64
	DoF       int
	Limit     float64
}

// Judge finds out which loop closures of the session are believed. Each is tested against the shortest way round: along the
// odometry and through closures that are held already. Those with the best prediction come first, and every one that is held makes
// the ways of others shorter. A closure
//
//   - that agrees with a prediction too sharp for accidents is held;
//   - that odometry alone cannot judge waits until others at different places agree with it, more of them than chance explains
//     (largest sets of mutually consistent closures, as for ties), and is open until then;
//   - that contradicts the way round is refused;
//   - to which there is no way round, because the odometry is broken, is held: without it the parts would lie loose.
//
// Closures that are held also tell how large the heading bias is, of which the odometry's covariance knows nothing, and whether all
// covariances promise too much. The findings depend on chain, closures and options alone, not on what was found before. Of the options
// Gate, BiasYaw, PlaceM, Chance and CliqueEffort are used; the dimension is that of the chain.
func (c *Chain) Judge(closures []Closure, o Options) []ClosureFinding {
	if len(closures) == 0 {
		return nil
	}
	bias, factor := 0.0, 1.0
	for pass := 1; ; pass++ {
		c.prepare(bias)
		j := newJudge(c, closures, o, factor)
		for j.grow() || j.unite() || j.bridge() {
		}
		found := j.conclude()
		b, f := j.value/j.known, factor*j.excess(found)
		if pass == passes || math.Abs(b) <= o.BiasYaw/5 && f <= promise*factor {
			return found
		}
		// A bias that bends long ways too much for a linear model is taken out of the poses, and all is looked at again.
		bias += b
		if f > promise*factor {
			factor = f
		}
	}
}

// passes bounds how often [Chain.Judge] begins anew; promise is how much larger than promised variances must be to be believed so.
const (
	passes  = 4
	promise = 1.5
)

// excess returns by how much the squared distances exceed what the covariances promise: their median over the expected one, false
// closures, which lie far out, left aside. It is 1 when there are too few to tell.
func (j *judge) excess(found []ClosureFinding) float64 {
	var near []float64
	for i := range found {
		if x := &found[i]; x.DoF > 0 && x.Statistic < 10*j.gate {
			near = append(near, x.Statistic)
		}
	}
	const enough = 10
	if len(near) < enough {
		return 1
	}
	slices.Sort(near)
	return near[len(near)/2] / distuv.ChiSquared{K: float64(j.dof)}.Quantile(0.5)
}

// judge is the state of [Chain.Judge].
type judge struct {
	c      *Chain
	o      Options
	links  []link // from the earlier keyframe to the later one
	dof    int
	gate   float64
	refuse float64
	long   float64 // sides of the rectangle that the track fills, m
	short  float64

	held []bool
	seen []sight // of each closure, when it was last looked at
	net  network

	// The heading bias as the held closures show it: information and information times value.
	known, value float64
	factor       float64 // of all covariances
}

// sight is a closure against a way round: e is the misclosure, s what a heading bias does to it, C its covariance without the bias.
type sight struct {
	found      bool
	ee, se, ss float64 // e' C^-1 e, s' C^-1 e, s' C^-1 s
	c          cov
	s          lie.Tangent
	length     float64
}

func newJudge(c *Chain, closures []Closure, o Options, factor float64) *judge {
	j := &judge{c: c, o: o, dof: 3 * (c.dim - 1), held: make([]bool, len(closures)), seen: make([]sight, len(closures))}
	chi := distuv.ChiSquared{K: float64(j.dof)}
	j.gate = chi.Quantile(o.Gate)
	j.refuse = chi.Quantile(1 - (1-o.Gate)/10)
	j.links = make([]link, len(closures))
	for k := range closures {
		x := &closures[k]
		if min(x.From, x.To) < 0 || max(x.From, x.To) >= c.Len() || x.From == x.To {
			panic("evidence: a closure joins two keyframes of the chain")
		}
		spread, ok := covarianceOf(&x.Info, c.dim, vague)
		if !ok { // it says nothing that can be used
			spread, _ = covarianceOf(&[36]float64{}, c.dim, vague)
		}
		l := link{i: x.From, j: x.To, z: x.Z, c: spread}
		if l.i > l.j {
			z := l.z.Inv()
			l = link{i: x.To, j: x.From, z: z, c: l.c.carry(&z)}
		}
		j.links[k] = l
	}
	j.long, j.short = c.extent()
	j.net = newNetwork(c, j.links)
	j.known = 1 / (o.BiasYaw * o.BiasYaw)
	j.value = -c.bias * j.known
	j.factor = factor
	return j
}

// extent returns the sides of the rectangle that the track fills.
func (c *Chain) extent() (long, short float64) {
	const most = 256
	n := len(c.pose)
	sample := track{Unit: &Unit{}}
	for k := 0; k < min(n, most); k++ {
		sample.Poses = append(sample.Poses, c.pose[k*n/min(n, most)])
	}
	m := sample.spread()
	return sides(2*m[0], 2*m[1], 2*m[2])
}

// bias returns the heading bias and its variance. It is never taken as known better than to a tenth of what it may be: it changes,
// and ways share legs.
func (j *judge) bias() (b, variance float64) {
	floor := j.o.BiasYaw / 10
	return j.value / j.known, math.Max(1/j.known, floor*floor)
}

// look tests closure t against the shortest way round.
func (j *judge) look(t int) sight {
	l := &j.links[t]
	w, ok := j.net.walk(t)
	if !ok {
		return sight{}
	}
	return j.against(l, &w)
}

func (j *judge) against(l *link, w *way) sight {
	e, c := w.misclosure(l)
	c.scale(j.factor)
	v := sight{found: true, c: c, s: w.turn, length: w.length}
	var m [36]float64
	n := c.dense(j.c.dim, &m)
	if !invert(&m, n) {
		v.ee = math.Inf(1)
		return v
	}
	var x, y [6]float64
	pick(&e, j.c.dim, &x)
	pick(&w.turn, j.c.dim, &y)
	for r := 0; r < n; r++ {
		for q := 0; q < n; q++ {
			v.ee += x[r] * m[n*r+q] * x[q]
			v.se += y[r] * m[n*r+q] * x[q]
			v.ss += y[r] * m[n*r+q] * y[q]
		}
	}
	if !(v.ee < math.Inf(1) && v.ss < math.Inf(1)) {
		v.ee, v.se, v.ss = math.Inf(1), 0, 0
	}
	return v
}

// squared is the squared Mahalanobis distance with the bias as it is known, (e - s b)' (C + var s s')^-1 (e - s b).
func (j *judge) squared(v *sight) float64 {
	b, variance := j.bias()
	ee, se := v.ee-2*b*v.se+b*b*v.ss, v.se-b*v.ss
	return math.Max(0, ee-variance*se*se/(1+variance*v.ss))
}

// share is the part of the poses possible within the track that would pass the gate, see [body.share]. All headings occur.
func (j *judge) share(v *sight) float64 {
	_, variance := j.bias()
	c := v.c
	c.addOuter(&v.s, variance)
	wide, narrow := sides(c.P[0], c.P[1], c.P[4])
	g := 2 * math.Sqrt(j.gate/12)
	wide, narrow = wide*g, narrow*g
	p := math.Max(
		math.Min(1, wide/j.long)*math.Min(1, narrow/j.short),
		math.Min(1, wide/j.short)*math.Min(1, narrow/j.long))
	return math.Max(1e-12, p*math.Min(1, math.Sqrt(j.gate*c.S[8])/math.Pi))
}

// hold takes a closure into the solution; v is what speaks for it.
func (j *judge) hold(t int, v *sight) {
	j.held[t] = true
	j.net.open(t)
	if v.found {
		j.known += v.ss
		j.value += v.se
	}
}

// grow holds the closures that agree with predictions too sharp for an accident, the sharpest first; it reports whether there were any.
func (j *judge) grow() bool {
	type candidate struct {
		t     int
		share float64
	}
	var found []candidate
	for t := range j.links {
		if j.held[t] {
			continue
		}
		v := j.look(t)
		j.seen[t] = v
		if !v.found || j.squared(&v) > j.gate {
			continue
		}
		if p := j.share(&v); p*float64(len(j.links)) <= j.o.Chance {
			found = append(found, candidate{t, p})
		}
	}
	slices.SortFunc(found, func(a, b candidate) int { return cmp.Or(cmp.Compare(a.share, b.share), cmp.Compare(a.t, b.t)) })
	held := false
	for _, x := range found {
		// What was held in between may have shortened the way.
		v := j.look(x.t)
		j.seen[x.t] = v
		if j.squared(&v) <= j.gate {
			j.hold(x.t, &v)
			held = true
		}
	}
	return held
}

// unite looks for the largest set of mutually consistent closures among those that are not held and that their ways round do not
// contradict, and holds it if chance does not explain it.
func (j *judge) unite() bool {
	var left []int
	for t := range j.links {
		if v := &j.seen[t]; !j.held[t] && (!v.found || j.squared(v) <= j.refusal(v)) {
			left = append(left, t)
		}
	}
	if len(left) < 2 {
		return false
	}
	left = left[max(0, len(left)-most):]
	g := newGraph(len(left))
	for p := range left {
		for q := p + 1; q < len(left); q++ {
			if v, ok := j.pair(left[p], left[q]); ok && j.squared(&v) <= j.gate {
				g.connect(p, q)
			}
		}
	}
	free := make([]uint64, g.words)
	for p := range left {
		free[p>>6] |= 1 << (p & 63)
	}
	all := len(j.places(left))
	for {
		clique, _ := g.clique(free, j.o.CliqueEffort)
		if len(clique) < 2 {
			return false
		}
		members := make([]int, len(clique))
		for k, p := range clique {
			members[k] = left[p]
			free[p>>6] &^= 1 << (p & 63)
		}
		if !j.meant(j.places(members), all) {
			continue
		}
		for _, t := range members {
			v := j.look(t)
			j.seen[t] = v
			j.hold(t, &v)
		}
		return true
	}
}

// bridge holds the first closure to which there is no way round, if there is one: nothing else joins the parts of a track whose
// odometry is broken.
func (j *judge) bridge() bool {
	for t := range j.links {
		if !j.held[t] && !j.seen[t].found {
			j.hold(t, &j.seen[t])
			return true
		}
	}
	return false
}

// pair tests closure p against the way round through closure q alone.
func (j *judge) pair(p, q int) (sight, bool) {
	l, m := &j.links[p], &j.links[q]
	if !j.c.joined(l.i, m.i) || !j.c.joined(l.j, m.j) {
		return sight{}, false
	}
	w := start()
	w.along(j.c, l.i, m.i)
	w.across(m, false)
	w.along(j.c, m.j, l.j)
	v := j.against(l, &w)
	return v, v.found
}

// meant tells whether the mutual agreement of closures at different places, of so many places in all, is no accident. Unrelated
// closures would all agree with a chance of at most the product of the shares along any tree that spans them; the tree grows by its
// sharpest pair (Prim, "Shortest connection networks and some generalizations", Bell System Technical Journal 36, 1957), and any
// part of it on the way will do.
func (j *judge) meant(spots []int, all int) bool {
	if len(spots) < 2 {
		return false
	}
	near := make([]float64, len(spots)) // log share with the nearest one in the tree
	for k := range near {
		near[k] = math.Inf(1)
	}
	log, at := 0.0, 0
	for k := 1; k < len(spots); k++ {
		near[at] = math.NaN() // in the tree
		next := -1
		for q := range spots {
			if math.IsNaN(near[q]) {
				continue
			}
			if v, ok := j.pair(spots[q], spots[at]); ok {
				near[q] = math.Min(near[q], math.Log(j.share(&v)))
			}
			if next < 0 || near[q] < near[next] {
				next = q
			}
		}
		if log += math.Min(near[next], 0); expected(1, all, k+1, math.Exp(log/float64(k))) <= j.o.Chance {
			return true
		}
		at = next
	}
	return false
}

// places chooses closures that rest on different places, in the order of their first keyframe.
func (j *judge) places(ts []int) []int {
	order := slices.Clone(ts)
	slices.SortFunc(order, func(x, y int) int {
		return cmp.Or(cmp.Compare(j.links[x].i, j.links[y].i), cmp.Compare(x, y))
	})
	var spots []int
	for _, x := range order {
		l := &j.links[x]
		if !slices.ContainsFunc(spots, func(y int) bool {
			m := &j.links[y]
			return !j.c.apart(l.i, m.i, j.o.PlaceM) || !j.c.apart(l.j, m.j, j.o.PlaceM)
		}) {
			spots = append(spots, x)
		}
	}
	return spots
}

func (c *Chain) apart(i, k int, place float64) bool {
	return math.Abs(c.travel[i]-c.travel[k]) > place && distance(c.pose[i].T, c.pose[k].T) > place/2
}

// refusal is the squared distance from which on a way round refuses, see [body.refusal].
func (j *judge) refusal(v *sight) float64 {
	if j.share(v) > nearby {
		return 4 * j.refuse
	}
	return j.refuse
}

func (j *judge) conclude() []ClosureFinding {
	out := make([]ClosureFinding, len(j.links))
	for t := range out {
		x, v := &out[t], j.look(t)
		if v.found {
			x.Statistic, x.DoF, x.Limit = j.squared(&v), j.dof, j.gate
		}
		switch {
		case j.held[t] && v.found:
			x.Verdict, x.Reason = Held, fmt.Sprintf("agrees with a way round of %.0f m", v.length)
		case j.held[t]:
			x.Verdict, x.Reason = Held, "nothing else joins the two keyframes"
		case x.Statistic > j.refusal(&v):
			x.Verdict, x.Limit, x.Reason = Refused, j.refusal(&v), fmt.Sprintf("contradicts a way round of %.0f m", v.length)
		case x.Statistic > j.gate:
			x.Reason = fmt.Sprintf("agrees badly with a way round of %.0f m", v.length)
		default:
			x.Reason = fmt.Sprintf("a way round of %.0f m cannot tell: a second closure at another place would", v.length)
		}
	}
	return out
}
