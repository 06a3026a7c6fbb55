package evidence

import (
	"math"

	"selvage/internal/lie"
)

// Meeting is what the glimpses of two units, A < B, say of how their frames stand to each other.
type Meeting struct {
	A, B     int
	AFromB   lie.SE3
	Places   int     // separate places whose glimpses agree with that, a mark counting twice
	Margin   int     // by how many they exceed those of the best answer that contradicts it
	Chance   float64 // expected number of answers as good as this among unrelated glimpses
	Cycle    bool    // other units confirm it
	Supports []int   // the glimpses that agree, as indices
	Held     bool

	odds odds
}

// Met is what [Meet] found.
type Met struct {
	Group    []int // of each unit: the lowest unit of those whose frames are known to each other
	Pose     []lie.SE3
	Meetings []Meeting // of all pairs that glimpses bear on with one answer at least, those not held too
}

// Meet finds which units may be joined by glimpses, and how their frames stand to each other. What [Frames] proposes is believed only as far
// as the evidence goes, for a whole meeting may be with another robot than was thought: the glimpses of two units must agree at
// enough separate places, clearly more than speak for any other answer ([Options.CycleMargin] where other units confirm it,
// [Options.BridgeMargin] where none does), and by accident no more often than [Options.Chance] allows. Groups of units are joined in
// the same way by all that they have seen of each other. Glimpses that are near
// each other (half of [Options.PlaceM], less in a small site) are one place, and no meeting counts for more than three, or two along a straight line. A mark that both know by its name counts as two places: a name is rarely mistaken, and each mistake is one of its
// own. Level tells which units have z pointing up (nil: none); two glimpses determine the frames of two such units, three of others in
// space.
func Meet(units int, level []bool, glimpses []Glimpse, o Options) Met {
	f := newFraming(units, o.Dim == 2, glimpses, FrameOptions{Bound: DefaultFrameOptions().Bound, Least: 1})
	f.level, f.most, f.mostInSpace = level, 80, 24
	number := map[[2]int][]int{} // glimpses of a pair, in the order of f.of
	for i, g := range glimpses {
		pair := [2]int{min(g.A, g.B), max(g.A, g.B)}
		number[pair] = append(number[pair], i)
	}
	frames := f.find()
	met := Met{Group: make([]int, units), Pose: make([]lie.SE3, units)}
	pairs := 0
	for a := range units {
		for b := a + 1; b < units; b++ {
			if len(number[[2]int{a, b}]) > 0 {
				pairs++
			}
		}
	}
	for a := range units {
		for b := a + 1; b < units; b++ {
			if numbers := number[[2]int{a, b}]; len(numbers) > 0 && frames[a].Group == frames[b].Group {
				if m, ok := f.meeting(a, b, frames[a].Pose.Between(frames[b].Pose), pairs, o); ok {
					for i, k := range m.Supports {
						m.Supports[i] = numbers[k]
					}
					met.Meetings = append(met.Meetings, m)
				}
			}
		}
	}
	met.decide(units, o)
	for u := range met.Group {
		met.Pose[u] = frames[met.Group[u]].Pose.Between(frames[u].Pose)
		if met.Group[u] == u {
			met.Pose[u] = lie.Identity()
		}
	}
	return met
}

// meeting weighs the answer pose for two units; ok is false when no glimpse agrees with it.
func (f *framing) meeting(a, b int, pose lie.SE3, pairs int, o Options) (m Meeting, ok bool) {
	all := f.of[[2]int{a, b}]
	at := f.stage(all, &pose)
	m = Meeting{A: a, B: b, AFromB: pose}
	taken := make([]bool, len(all))
	variance := 0.0
	for i := range all {
		if v := f.bearsOut(&pose, &all[i], at); v > 0 {
			taken[i] = true
			variance += v
			m.Supports = append(m.Supports, i)
		}
	}
	if len(m.Supports) == 0 {
		return m, false
	}
	variance /= float64(len(m.Supports))
	places, marks := f.places(all, m.Supports, o)
	m.Places = places + 2*marks
	rival := 0
	for i := range f.found {
		h := &f.found[i]
		if h.a != a || h.b != b {
			continue
		}
		var against []int
		for k := range all {
			if !taken[k] && f.bearsOut(&h.pose, &all[k], h.at) > 0 {
				against = append(against, k)
			}
		}
		p, n := f.places(all, against, o)
		if least := f.least(a, b); p+n > least { // fewer agree with an answer that they make up themselves
			rival = max(rival, p+2*n)
		}
	}
	m.Margin = m.Places - rival
	m.odds = f.odds(all, places+marks, variance, o)
	if !f.flat(a, b) { // glimpses along one line leave the frames free to turn about it
		_, off := stretch(all, m.Supports)
		m.odds.line = off*off < 9*variance
	}
	m.Chance = float64(pairs) * together([]*odds{&m.odds})
	return m, true
}

// least is the number of glimpses that make up an answer for two units.
func (f *framing) least(a, b int) int {
	if f.flat(a, b) {
		return 2
	}
	return 3
}

// bearsOut returns the variance of a glimpse that agrees with a pose which holds at a stage of the drift, zero for others.
func (f *framing) bearsOut(pose *lie.SE3, g *Glimpse, at float64) float64 {
	v := g.Sigma*g.Sigma + math.Abs(g.Drift-at)
	if shift(pose, g) < f.o.Bound*v {
		return v
	}
	return 0
}

// stage finds the stage of the drift at which most agree with a pose.
func (f *framing) stage(all []Glimpse, pose *lie.SE3) (best float64) {
	most := -1.0
	for i := range all {
		if i > 0 && all[i].Drift == all[i-1].Drift {
			continue
		}
		score := 0.0
		for k := range all {
			g := &all[k]
			own := g.Sigma * g.Sigma
			if v := f.bearsOut(pose, g, all[i].Drift); v > 0 {
				score += (f.o.Bound - shift(pose, g)/v) * own / v
			}
		}
		if score > most {
			best, most = all[i].Drift, score
		}
	}
	return best
}

// Bounds on the places of one meeting: two robots may well drive alike for a while, and whoever drives straight moves like anyone
// else who does.
const (
	mostOfMeeting = 3
	mostInLine    = 2
)

// onePlace is the distance below which glimpses of two units are one place: half of [Options.PlaceM], in a small site an eighth of it, but
// what the glimpses can tell apart.
func onePlace(all []Glimpse, o Options) float64 {
	own := 0.0
	for i := range all {
		own += all[i].Sigma * all[i].Sigma / float64(len(all))
	}
	long, _ := extent(all)
	return math.Min(o.PlaceM/2, math.Max(long/8, 3*math.Sqrt(own)))
}

// places counts separate places, and named marks beside them, among some glimpses.
func (f *framing) places(all []Glimpse, set []int, o Options) (places, marks int) {
	radius := onePlace(all, o)
	near := radius * radius
	for _, i := range set {
		if all[i].Named {
			marks++
		}
	}
	done := make([]bool, len(set))
	for i := range set {
		if done[i] || all[set[i]].Named {
			continue
		}
		var group []int
		for j := i; j < len(set); j++ {
			if h := &all[set[j]]; !h.Named && h.Meeting == all[set[i]].Meeting {
				done[j] = true
				group = append(group, set[j])
			}
		}
		most := mostOfMeeting
		if _, off := stretch(all, group); off < radius {
			most = mostInLine
		}
		var spots []*Glimpse
	next:
		for _, k := range group {
			for _, s := range spots {
				if squaredDistance(s.InA, all[k].InA) < near || squaredDistance(s.InB, all[k].InB) < near {
					continue next
				}
			}
			spots = append(spots, &all[k])
		}
		places += min(len(spots), most)
	}
	return places, marks
}

// stretch returns how far glimpses reach from the first, and how far they lie off the line to the farthest, in the frame of B.
func stretch(all []Glimpse, set []int) (far, off float64) {
	var axis [3]float64
	from := all[set[0]].InB
	for _, k := range set {
		if d := math.Sqrt(squaredDistance(all[k].InB, from)); d > far {
			far = d
			for c := range axis {
				axis[c] = (all[k].InB[c] - from[c]) / d
			}
		}
	}
	for _, k := range set {
		along, square := 0.0, squaredDistance(all[k].InB, from)
		for c := range axis {
			along += axis[c] * (all[k].InB[c] - from[c])
		}
		off = math.Max(off, math.Sqrt(math.Max(0, square-along*along)))
	}
	return far, off
}

// extent is how far the glimpses of two units lie apart along and across, the mean of what the two frames say.
func extent(all []Glimpse) (long, short float64) {
	var sum, moment [2][2]float64
	var cross [2]float64
	for i := range all {
		for k, p := range [2]*[3]float64{&all[i].InA, &all[i].InB} {
			for c := range 2 {
				sum[k][c] += p[c]
				moment[k][c] += p[c] * p[c]
			}
			cross[k] += p[0] * p[1]
		}
	}
	n := float64(len(all))
	xx, xy, yy := 0.0, 0.0, 0.0
	for k := range 2 {
		xx += moment[k][0]/n - sum[k][0]*sum[k][0]/n/n
		yy += moment[k][1]/n - sum[k][1]*sum[k][1]/n/n
		xy += cross[k]/n - sum[k][0]*sum[k][1]/n/n
	}
	return sides(xx/2, xy/2, yy/2)
}

// decide holds the meetings that stand, and numbers the groups that these connect. The weakest that does not reach its margin goes
// first: without it others may be confirmed by fewer. What two groups have seen of each other then counts together.
func (m *Met) decide(units int, o Options) {
	for i := range m.Meetings {
		m.Meetings[i].Held = m.Meetings[i].Chance <= o.Chance
	}
	for {
		worst, lack := -1, 0
		for i := range m.Meetings {
			x := &m.Meetings[i]
			if !x.Held {
				continue
			}
			group := m.connect(units, i)
			x.Cycle = group[x.A] == group[x.B]
			need := o.BridgeMargin
			if x.Cycle {
				need = o.CycleMargin
			}
			if need-x.Margin > lack {
				worst, lack = i, need-x.Margin
			}
		}
		if worst < 0 {
			m.Group = m.connect(units, -1)
			m.pool(units, o)
			return
		}
		m.Meetings[worst].Held = false
	}
}

// connect numbers what the held meetings but one connect, each set by its lowest unit.
func (m *Met) connect(units, but int) []int {
	group := make([]int, units)
	for u := range group {
		group[u] = u
	}
	for i := range m.Meetings {
		if x := &m.Meetings[i]; x.Held && i != but {
			merge(group, x.A, x.B)
		}
	}
	for u := range group {
		group[u] = root(group, u)
	}
	return group
}
