package evidence

import (
	"math"
	"slices"

	"selvage/internal/lie"
)

// Glimpse is a spot that two units know, each in its own frame: where one saw the other, and where the other was. A sighting that
// tells range and bearing gives one, whichever of the two saw.
type Glimpse struct {
	A, B     int        // units
	InA, InB [3]float64 // the spot, m; z is zero in the plane
	Sigma    float64    // of its difference once the frames are aligned, m
	At       float64    // when, s
}

// FrameOptions steer [Frames].
type FrameOptions struct {
	Growth float64 // variance that the relative frame of two units gains in a second, by the drift of both, m^2/s
	Bound  float64 // squared normalised residual above which a glimpse counts for nothing
	Least  int     // glimpses that must agree beyond those that make up a hypothesis
}

// DefaultFrameOptions suit units that hold their own maps together by marks or closures.
func DefaultFrameOptions() FrameOptions { return FrameOptions{Growth: 0, Bound: 13.816, Least: 2} }

// Frame is where the frame of a unit stands in that of the first unit of its group.
type Frame struct {
	Group int // its first unit
	Pose  lie.SE2
	Score float64 // by which it joined
}

// relation is a possible pose of frame b in frame a.
type relation struct {
	a, b  int
	pose  lie.SE2
	at    float64
	score float64
}

const (
	mostGlimpses = 160 // of a pair that hypotheses are made from, evenly chosen
	keptOfPair   = 6   // hypotheses
)

// Frames finds how the frames of planar units stand to each other from glimpses alone. Two glimpses of a pair that lie apart make a
// hypothesis; all others of the pair vote on it, the less the longer ago they were (consensus after Fischler and Bolles, "Random
// sample consensus: a paradigm for model fitting with applications to image analysis and automated cartography", Communications of
// the ACM 24(6), 1981, here over all pairs of glimpses instead of a random sample). The strongest pair begins a group; then, one after
// another, the unit joins whose best hypothesis has most votes among the glimpses with all units of the group, so that a
// hypothesis which contradicts a third robot loses. Units that nothing places are groups of their own.
func Frames(units int, glimpses []Glimpse, o FrameOptions) []Frame {
	f := framing{o: o, of: map[[2]int][]Glimpse{}, frames: make([]Frame, units)}
	for _, g := range glimpses {
		if g.A > g.B {
			g.A, g.B, g.InA, g.InB = g.B, g.A, g.InB, g.InA
		}
		f.of[[2]int{g.A, g.B}] = append(f.of[[2]int{g.A, g.B}], g)
	}
	for a := range units {
		for b := a + 1; b < units; b++ {
			f.found = append(f.found, f.pair(a, b)...)
		}
	}
	placed := make([]bool, units)
	for i := range f.frames {
		f.frames[i] = Frame{Group: i, Pose: lie.SE2{C: 1}}
	}
	for {
		best := -1
		for i := range f.found {
			h := &f.found[i]
			if !placed[h.a] && !placed[h.b] && (best < 0 || h.score > f.found[best].score) {
				best = i
			}
		}
		if best < 0 {
			return f.frames
		}
		f.grow(&f.found[best], placed)
	}
}

type framing struct {
	o      FrameOptions
	of     map[[2]int][]Glimpse
	found  []relation
	frames []Frame
}

// grow makes a group of two units and lets others join.
func (f *framing) grow(h *relation, placed []bool) {
	group := min(h.a, h.b)
	members := []int{h.a, h.b}
	f.frames[h.b] = Frame{Group: group, Pose: h.pose, Score: h.score}
	f.frames[h.a].Score = h.score
	placed[h.a], placed[h.b] = true, true
	for {
		var best relation
		best.a = -1
		for i := range f.found {
			c := f.found[i]
			if placed[c.a] == placed[c.b] {
				continue
			}
			if placed[c.b] {
				c.a, c.b, c.pose = c.b, c.a, c.pose.Inv()
			}
			if f.frames[c.a].Group != group {
				continue
			}
			c.pose = f.frames[c.a].Pose.Mul(c.pose)
			c.score = 0
			for _, m := range members {
				score, _ := f.votes(m, c.b, f.frames[m].Pose.Between(c.pose), c.at)
				c.score += score
			}
			if best.a < 0 || c.score > best.score {
				best = c
			}
		}
		if best.a < 0 {
			return
		}
		placed[best.b] = true
		members = append(members, best.b)
		f.frames[best.b] = Frame{Group: group, Pose: best.pose, Score: best.score}
	}
}

// votes returns how far the glimpses of two units bear out a relative pose at a moment, and how many do.
func (f *framing) votes(a, b int, pose lie.SE2, at float64) (score float64, count int) {
	if a > b {
		a, b, pose = b, a, pose.Inv()
	}
	for i := range f.of[[2]int{a, b}] {
		g := &f.of[[2]int{a, b}][i]
		own := g.Sigma * g.Sigma
		v := own + f.o.Growth*math.Abs(g.At-at)
		x, y := shift(pose, g)
		if r := (x*x + y*y) / v; r < f.o.Bound {
			score += (f.o.Bound - r) * own / v
			count++
		}
	}
	return score, count
}

// shift returns the difference of the two places of a glimpse, in the frame of A.
func shift(pose lie.SE2, g *Glimpse) (x, y float64) {
	return pose.X + pose.C*g.InB[0] - pose.S*g.InB[1] - g.InA[0], pose.Y + pose.S*g.InB[0] + pose.C*g.InB[1] - g.InA[1]
}

// pair returns the hypotheses with most votes of two units, different from each other.
func (f *framing) pair(a, b int) (best []relation) {
	all := f.of[[2]int{a, b}]
	step := max(1, (len(all)+mostGlimpses-1)/mostGlimpses)
	for i := 0; i < len(all); i += step {
		for j := i + step; j < len(all); j += step {
			g, h := &all[i], &all[j]
			ax, ay := h.InA[0]-g.InA[0], h.InA[1]-g.InA[1]
			bx, by := h.InB[0]-g.InB[0], h.InB[1]-g.InB[1]
			la, lb := math.Hypot(ax, ay), math.Hypot(bx, by)
			v := g.Sigma*g.Sigma + h.Sigma*h.Sigma + f.o.Growth*math.Abs(g.At-h.At)
			// The direction must come out to a third of a radian or so, and the lengths must agree.
			if la*lb < 9*v || (la-lb)*(la-lb) > f.o.Bound*v {
				continue
			}
			c, s := bx*ax+by*ay, bx*ay-by*ax
			n := math.Hypot(c, s)
			p := lie.SE2{C: c / n, S: s / n}
			mx, my := (g.InB[0]+h.InB[0])/2, (g.InB[1]+h.InB[1])/2
			p.X = (g.InA[0]+h.InA[0])/2 - p.C*mx + p.S*my
			p.Y = (g.InA[1]+h.InA[1])/2 - p.S*mx - p.C*my
			at := (g.At + h.At) / 2
			score, count := f.votes(a, b, p, at)
			if count < 2+f.o.Least {
				continue
			}
			if len(best) == keptOfPair && score <= best[keptOfPair-1].score {
				continue
			}
			best = keep(best, relation{a, b, p, at, score})
		}
	}
	for i := range best {
		h := &best[i]
		for range 5 {
			h.pose = f.refine(h)
		}
		h.score, _ = f.votes(a, b, h.pose, h.at)
	}
	slices.SortStableFunc(best, func(x, y relation) int {
		switch {
		case x.score > y.score:
			return -1
		case x.score < y.score:
			return 1
		}
		return 0
	})
	return best
}

// keep enters h in a list by score, in place of those that say nearly the same with fewer votes.
func keep(list []relation, h relation) []relation {
	for i := range list {
		d := list[i].pose.Between(h.pose).Log()
		if math.Hypot(d[0], d[1]) < 1 && math.Abs(d[2]) < 0.2 {
			if list[i].score >= h.score {
				return list
			}
			list = slices.Delete(list, i, i+1)
			break
		}
	}
	at := 0
	for at < len(list) && list[at].score >= h.score {
		at++
	}
	list = slices.Insert(list, at, h)
	return list[:min(len(list), keptOfPair)]
}

// refine fits the pose to the glimpses that bear it out, each by its weight: the rigid fit in closed form.
func (f *framing) refine(h *relation) lie.SE2 {
	var w, ax, ay, bx, by float64
	all := f.of[[2]int{h.a, h.b}]
	weights := make([]float64, len(all))
	for i := range all {
		g := &all[i]
		v := g.Sigma*g.Sigma + f.o.Growth*math.Abs(g.At-h.at)
		x, y := shift(h.pose, g)
		if x*x+y*y < f.o.Bound*v {
			q := 1 / v
			weights[i] = q
			w += q
			ax, ay, bx, by = ax+q*g.InA[0], ay+q*g.InA[1], bx+q*g.InB[0], by+q*g.InB[1]
		}
	}
	if w == 0 {
		return h.pose
	}
	ax, ay, bx, by = ax/w, ay/w, bx/w, by/w
	var c, s float64
	for i := range all {
		px, py, qx, qy := all[i].InB[0]-bx, all[i].InB[1]-by, all[i].InA[0]-ax, all[i].InA[1]-ay
		c += weights[i] * (px*qx + py*qy)
		s += weights[i] * (px*qy - py*qx)
	}
	n := math.Hypot(c, s)
	if n == 0 {
		return h.pose
	}
	p := lie.SE2{C: c / n, S: s / n}
	p.X, p.Y = ax-p.C*bx+p.S*by, ay-p.S*bx-p.C*by
	return p
}
