package evidence

import (
	"cmp"
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
	Drift    float64    // variance that the places of both units had by then in their own frames, m^2
	Named    bool       // a mark that both know by its name; see [Meet]
	Meeting  int        // of glimpses that are not named: those with one number may be with another robot than was thought, all of them
}

// FrameOptions steer [Frames].
type FrameOptions struct {
	Bound float64 // squared normalised residual above which a glimpse counts for nothing
	Least int     // glimpses that must agree beyond those that make up a hypothesis
}

// DefaultFrameOptions take a glimpse for wrong at one in a thousand.
func DefaultFrameOptions() FrameOptions { return FrameOptions{Bound: 13.816, Least: 2} }

// Frame is where the frame of a unit stands in that of the first unit of its group.
type Frame struct {
	Group int // its first unit
	Pose  lie.SE3
	Score float64 // by which it joined
}

// relation is a possible pose of frame b in frame a.
type relation struct {
	a, b  int
	pose  lie.SE3
	at    float64
	score float64
}

const (
	mostGlimpses = 160 // of a pair that hypotheses are made from, evenly chosen
	mostInSpace  = 40
	keptOfPair   = 6 // hypotheses
)

// Frames finds how the frames of units stand to each other from glimpses alone. Two glimpses of a pair that lie apart make a
// hypothesis, in space three; all others of the pair vote on it, the less the more the units have
// drifted in between (consensus after Fischler and Bolles, "Random
// sample consensus: a paradigm for model fitting with applications to image analysis and automated cartography", Communications of
// the ACM 24(6), 1981, here over all pairs of glimpses instead of a random sample). The strongest pair begins a group; then, one after
// another, the unit joins whose best hypothesis has most votes among the glimpses with all units of the group, so that a
// hypothesis which contradicts a third robot loses. Units that nothing places are groups of their own.
func Frames(units int, planar bool, glimpses []Glimpse, o FrameOptions) []Frame {
	f := newFraming(units, planar, glimpses, o)
	return f.find()
}

func newFraming(units int, planar bool, glimpses []Glimpse, o FrameOptions) *framing {
	f := &framing{planar: planar, o: o, most: mostGlimpses, mostInSpace: mostInSpace, of: map[[2]int][]Glimpse{}, frames: make([]Frame, units)}
	for _, g := range glimpses {
		if g.A > g.B {
			g.A, g.B, g.InA, g.InB = g.B, g.A, g.InB, g.InA
		}
		f.of[[2]int{g.A, g.B}] = append(f.of[[2]int{g.A, g.B}], g)
	}
	return f
}

// find does the work of [Frames].
func (f *framing) find() []Frame {
	units := len(f.frames)
	for a := range units {
		for b := a + 1; b < units; b++ {
			f.found = append(f.found, f.pair(a, b)...)
		}
	}
	placed := make([]bool, units)
	for i := range f.frames {
		f.frames[i] = Frame{Group: i, Pose: lie.Identity()}
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
			return f.relative()
		}
		f.grow(&f.found[best], placed)
	}
}

// relative counts the frames of each group from its first unit.
func (f *framing) relative() []Frame {
	first := make([]int, len(f.frames)) // of each group, by the unit that it was named after so far
	for u := len(f.frames) - 1; u >= 0; u-- {
		first[f.frames[u].Group] = u
	}
	out := make([]Frame, len(f.frames))
	for u, x := range f.frames {
		head := first[x.Group]
		out[u] = Frame{Group: head, Pose: f.frames[head].Pose.Between(x.Pose), Score: x.Score}
		if u == head {
			out[u].Pose = lie.Identity()
		}
	}
	return out
}

type framing struct {
	planar bool
	level  []bool // units whose z axis points up; nil for none
	o      FrameOptions

	most, mostInSpace int // glimpses of a pair that hypotheses are made from, evenly chosen

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

// votes returns how far the glimpses of two units bear out a relative pose that held at a stage of their drift, and how many do.
func (f *framing) votes(a, b int, pose lie.SE3, at float64) (score float64, count int) {
	if a > b {
		a, b, pose = b, a, pose.Inv()
	}
	for i := range f.of[[2]int{a, b}] {
		g := &f.of[[2]int{a, b}][i]
		own := g.Sigma * g.Sigma
		v := own + math.Abs(g.Drift-at)
		if r := shift(&pose, g) / v; r < f.o.Bound {
			score += (f.o.Bound - r) * own / v
			count++
		}
	}
	return score, count
}

// shift returns the squared distance of the two places of a glimpse.
func shift(pose *lie.SE3, g *Glimpse) float64 {
	p := pose.Apply(g.InB)
	return squaredDistance(p, g.InA)
}

func squaredDistance(a, b [3]float64) float64 {
	x, y, z := a[0]-b[0], a[1]-b[1], a[2]-b[2]
	return x*x + y*y + z*z
}

// pair returns the hypotheses with most votes of two units, different from each other.
func (f *framing) pair(a, b int) (best []relation) {
	all := f.of[[2]int{a, b}]
	flat := f.flat(a, b)
	most := f.most
	if !flat {
		most = f.mostInSpace
	}
	step := max(1, (len(all)+most-1)/most)
	try := func(set ...*Glimpse) {
		var from, to [3][3]float64
		at := 0.0
		for i, g := range set {
			from[i], to[i] = g.InB, g.InA
			at += g.Drift / float64(len(set))
		}
		pose, ok := lie.FitPoints(flat, from[:len(set)], to[:len(set)], nil)
		if !ok {
			return
		}
		score, count := f.votes(a, b, pose, at)
		if count >= len(set)+f.o.Least && (len(best) < keptOfPair || score > best[keptOfPair-1].score) {
			best = keep(best, relation{a, b, pose, at, score})
		}
	}
	for i := 0; i < len(all); i += step {
		for j := i + step; j < len(all); j += step {
			if !f.apart(&all[i], &all[j]) {
				continue
			}
			if flat {
				try(&all[i], &all[j])
				continue
			}
			for k := j + step; k < len(all); k += step {
				if f.apart(&all[i], &all[k]) && f.apart(&all[j], &all[k]) {
					try(&all[i], &all[j], &all[k])
				}
			}
		}
	}
	for i := range best {
		h := &best[i]
		for range 5 {
			h.pose = f.refine(h)
		}
		h.score, _ = f.votes(a, b, h.pose, h.at)
	}
	slices.SortStableFunc(best, func(x, y relation) int { return cmp.Compare(y.score, x.score) })
	return best
}

// flat tells whether the frames of two units differ by no more than a turn about z and a shift.
func (f *framing) flat(a, b int) bool { return f.planar || f.level != nil && f.level[a] && f.level[b] }

// apart tells whether two glimpses lie far enough apart, in both frames equally, for the direction between them to come out to
// about a third of a radian.
func (f *framing) apart(g, h *Glimpse) bool {
	v := g.Sigma*g.Sigma + h.Sigma*h.Sigma + math.Abs(g.Drift-h.Drift)
	la, lb := math.Sqrt(squaredDistance(g.InA, h.InA)), math.Sqrt(squaredDistance(g.InB, h.InB))
	return la*lb >= 9*v && (la-lb)*(la-lb) <= f.o.Bound*v
}

// keep enters h in a list by score, in place of those that say nearly the same with fewer votes.
func keep(list []relation, h relation) []relation {
	for i := range list {
		between := list[i].pose.Between(h.pose)
		d := between.Log()
		if d[0]*d[0]+d[1]*d[1]+d[2]*d[2] < 1 && d[3]*d[3]+d[4]*d[4]+d[5]*d[5] < 0.04 {
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

// refine fits the pose to the glimpses that bear it out, each by its weight.
func (f *framing) refine(h *relation) lie.SE3 {
	var from, to [][3]float64
	var weights []float64
	all := f.of[[2]int{h.a, h.b}]
	for i := range all {
		g := &all[i]
		v := g.Sigma*g.Sigma + math.Abs(g.Drift-h.at)
		if shift(&h.pose, g) < f.o.Bound*v {
			from, to, weights = append(from, g.InB), append(to, g.InA), append(weights, 1/v)
		}
	}
	if pose, ok := lie.FitPoints(f.flat(h.a, h.b), from, to, weights); ok {
		return pose
	}
	return h.pose
}
