package coordinator

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/msgs"
)

// meeting joins two islands of whole poses by what is less: sightings of each other, and marks that both know.
type meeting struct {
	units [2]int // one of each; the second is the number of all units for the control points
	ties  []int
	marks int // beside the ties
	least int // of both together, or it joins nothing
}

// align joins islands by ties that are less than a pose, by marks, and with the control points; it moves the starts along and holds the ties
// that have a part in that. What else lies within one island is left to the test on the joint solution.
func (c *Coordinator) align(n *network, w *weighed) {
	if !n.partial {
		return
	}
	if w.start == nil {
		w.chain(n)
	}
	bodies := 0
	for _, m := range w.island {
		bodies = max(bodies, m+1)
	}
	level := c.upright(n, w, bodies)
	glimpses, ties := c.glimpses(n, w, bodies)
	asked := c.cfg.Evidence
	if c.cfg.HoldAll {
		asked.Chance, asked.CycleMargin, asked.BridgeMargin = math.Inf(1), 1, 1
	}
	met := evidence.Meet(bodies+1, level, glimpses, asked)
	of := make([]int, bodies+1) // body -> one of its units
	for u := len(n.units) - 1; u >= 0; u-- {
		of[w.island[u]] = u
	}
	of[bodies] = len(n.units)
	weighing := map[[2]int]*evidence.Meeting{}
	for i := range met.Meetings {
		m := &met.Meetings[i]
		weighing[[2]int{m.A, m.B}] = m
		if !m.Held {
			continue
		}
		x := meeting{units: [2]int{of[m.A], of[m.B]}, least: c.cfg.Dim}
		if level[m.A] && level[m.B] {
			x.least = 2
		}
		for _, k := range m.Supports {
			if t := ties[k]; t >= 0 {
				x.ties = append(x.ties, t)
			} else {
				x.marks++
			}
		}
		for _, t := range x.ties {
			if !w.held[t] && n.ties[t].ruled == nil {
				w.held[t] = true
				n.ties[t].judge(msgs.Held, fmt.Sprintf("agrees with %d other sightings and marks at places that count %d on how the two maps lie", len(m.Supports)-1, m.Places),
					msgs.Evidence{Places: m.Places, Margin: float64(m.Margin)})
			}
		}
		w.meetings = append(w.meetings, x)
	}
	c.fix(n, w, &met, glimpses, of, level)
	for u := range w.start {
		b := w.island[u]
		w.start[u] = met.Pose[b].Mul(w.start[u])
	}
	if root := met.Group[bodies]; root != bodies { // its frame is that of the control points
		back := met.Pose[bodies].Inv()
		for u := range w.start {
			if met.Group[w.island[u]] == root {
				w.start[u] = back.Mul(w.start[u])
			}
		}
	}
	before := slices.Clone(w.island)
	w.island = w.islands(n)
	for i := range n.ties {
		t := &n.ties[i]
		if t.sight == nil || t.ruled != nil || w.held[i] {
			continue
		}
		a, b := before[t.from], before[t.to]
		t.judge(msgs.Open, c.openReason(t.sight, weighing[[2]int{min(a, b), max(a, b)}]), msgs.Evidence{DoF: t.sight.dof, Limit: t.sight.limit()})
	}
	w.split(n, c.cfg.HoldAll)
}

// openReason says what would settle a tie that is less than a pose, given what is known of its two maps.
func (c *Coordinator) openReason(s *sight, m *evidence.Meeting) string {
	if m == nil || m.Held || s.dof == 0 || !s.sound {
		return s.alone()
	}
	if m.Chance > c.cfg.Evidence.Chance {
		return fmt.Sprintf("%d sightings and marks agree on how the two maps lie, but so many may by accident; sightings at other places, or marks that both have seen, would settle it", len(m.Supports))
	}
	return fmt.Sprintf("%d sightings and marks agree on how the two maps lie, at places that count %d, a margin of %d; %d are needed: a mark counts 2, a meeting at most 3",
		len(m.Supports), m.Places, m.Margin, c.cfg.Evidence.BridgeMargin)
}

// chain puts the units of every island together by the held ties alone.
func (w *weighed) chain(n *network) {
	w.start = slices.Repeat([]lie.SE3{lie.Identity()}, len(n.units))
	island := w.island
	w.island = make([]int, len(n.units))
	for u := range w.island {
		w.island[u] = u
	}
	for i := range n.ties {
		if w.held[i] && n.ties[i].sight == nil {
			w.join(n, i)
		}
	}
	w.island = island
}

// Squared sigmas of what sees and of maps count fourfold: errors of a camera vary slowly, and those of a map do.
const slow = 4

// glimpses collects what the islands know of each other's frames, each in that of the island; the control points are one more body. It returns the
// tie behind each, -1 for marks.
func (c *Coordinator) glimpses(n *network, w *weighed, bodies int) (out []evidence.Glimpse, ties []int) {
	number := n.meetings(c.cfg.Evidence.PlaceM)
	for i := range n.ties {
		t := &n.ties[i]
		a, b := w.island[t.from], w.island[t.to]
		if t.sight == nil || t.ruledOut() || a == b || n.loose(i) {
			continue
		}
		place, variance, whole := t.sight.place(c.width())
		if !whole {
			continue
		}
		from, to := &n.units[t.from], &n.units[t.to]
		x := w.start[t.from].Mul(from.model.poses[t.fromNode])
		y := w.start[t.to].Mul(to.model.poses[t.toNode])
		out = append(out, evidence.Glimpse{
			A: a, B: b, InA: c.flat(x.Apply(place)), InB: c.flat(y.Apply(t.sight.spot)), Sigma: math.Sqrt(slow * variance),
			Drift: from.spread(c.width())[t.fromNode] + to.spread(c.width())[t.toNode], Meeting: number[i],
		})
		ties = append(ties, i)
	}
	n.eachMark(func(mark string, all []known) {
		var best []known // of each body, the unit that knows it best
		for _, k := range all {
			if n.units[k.unit].model.err != nil {
				continue
			}
			at := slices.IndexFunc(best, func(b known) bool { return w.island[b.unit] == w.island[k.unit] })
			switch {
			case at < 0:
				best = append(best, k)
			case n.variance(k) < n.variance(best[at]):
				best[at] = k
			}
		}
		for x, k := range best {
			for _, l := range best[:x] {
				out = append(out, evidence.Glimpse{A: w.island[l.unit], B: w.island[k.unit], InA: n.placeOf(w, l), InB: n.placeOf(w, k),
					Sigma: math.Sqrt(slow * (n.variance(k) + n.variance(l))), Named: true})
				ties = append(ties, -1)
			}
			if m := c.control(mark); m != nil {
				out = append(out, evidence.Glimpse{A: w.island[k.unit], B: bodies, InA: n.placeOf(w, k), InB: c.flat(m.At),
					Sigma: math.Sqrt(slow*n.variance(k) + m.variance(c.cfg.Dim)), Named: true})
				ties = append(ties, -1)
			}
		}
	})
	return out, ties
}

func (c *Coordinator) flat(p [3]float64) [3]float64 {
	if c.cfg.Dim == 2 {
		p[2] = 0
	}
	return p
}

// fix brings groups to the control points that these hold by their number alone: two in the plane, three in space, if nothing contradicts. A person
// has measured them; where there are more, they are weighed like any marks.
func (c *Coordinator) fix(n *network, w *weighed, met *evidence.Met, glimpses []evidence.Glimpse, of []int, level []bool) {
	control := len(of) - 1
	for {
		body, least := -1, 0
		var from, to [][3]float64
		var sigma []float64
		for b := range control { // the first group that is not there
			if met.Group[b] != b || met.Group[b] == met.Group[control] {
				continue
			}
			from, to, sigma = from[:0], to[:0], sigma[:0]
			for i := range glimpses {
				if g := &glimpses[i]; g.B == control && met.Group[g.A] == b {
					from, to, sigma = append(from, met.Pose[g.A].Apply(g.InA)), append(to, g.InB), append(sigma, g.Sigma)
				}
			}
			least = c.cfg.Dim
			if level[b] && level[control] {
				least = 2
			}
			if x, ok := fitAll(least == 2, from, to, sigma); ok {
				body = b
				// x is control_from_group.
				if root := met.Group[control]; root == control { // nobody is there yet
					met.Pose[control] = x.Inv()
					met.Group[control] = b
				} else {
					move := met.Pose[control].Mul(x)
					for k := range met.Group {
						if met.Group[k] == b {
							met.Pose[k], met.Group[k] = move.Mul(met.Pose[k]), root
						}
					}
				}
				break
			}
		}
		if body < 0 {
			return
		}
		w.meetings = append(w.meetings, meeting{units: [2]int{of[body], len(n.units)}, marks: len(from), least: least})
	}
}

// upright turns the islands in space that know the vertical so that z points up, and tells which these are; the last is the frame of the control
// points.
func (c *Coordinator) upright(n *network, w *weighed, bodies int) []bool {
	level := make([]bool, bodies+1)
	if c.cfg.Dim == 2 {
		return level
	}
	level[bodies] = c.cfg.LevelDatum
	turn := slices.Repeat([]lie.SE3{lie.Identity()}, bodies)
	for u := range n.units {
		if b, up, ok := w.island[u], [3]float64{}, false; !level[b] {
			if up, ok = n.units[u].vertical(); ok {
				level[b] = true
				turn[b].R = uprighted(w.start[u].R.Apply(up))
			}
		}
	}
	for u, b := range w.island {
		w.start[u] = turn[b].Mul(w.start[u])
	}
	return level
}

// vertical returns up in the frame of a unit, if its map knows that.
func (u *unit) vertical() (up [3]float64, ok bool) {
	for i := range u.part.Levels {
		if l := &u.part.Levels[i]; u.model.inMain(l.Node) {
			return u.model.poses[l.Node].R.Apply(l.Up), true
		}
	}
	return up, false
}

// uprighted returns the rotation that turns a unit vector up by the shortest way.
func uprighted(v [3]float64) lie.Mat3 {
	flat := math.Hypot(v[0], v[1])
	angle := math.Atan2(flat, v[2])
	if angle == 0 {
		return lie.Identity().R
	}
	axis := [3]float64{1, 0, 0}
	if flat > 0 {
		axis = [3]float64{v[1] / flat, -v[0] / flat, 0}
	}
	return lie.ExpSO3([3]float64{angle * axis[0], angle * axis[1], 0})
}

// fitAll fits a motion to points of which all must agree; flat, it turns about z alone.
func fitAll(flat bool, from, to [][3]float64, sigma []float64) (lie.SE3, bool) {
	least := 3
	if flat {
		least = 2
	}
	if len(from) < least {
		return lie.Identity(), false
	}
	x, ok := lie.FitPoints(flat, from, to, nil)
	if !ok {
		return x, false
	}
	worst := slices.Max(sigma)
	off := 0.0 // from the line through the first and the farthest
	far := 0.0
	for i := range from {
		p := x.Apply(from[i])
		if squared(p, to[i]) > evidence.DefaultFrameOptions().Bound*sigma[i]*sigma[i] {
			return x, false
		}
		far = math.Max(far, math.Hypot(to[i][0]-to[0][0], to[i][1]-to[0][1]))
	}
	if far < 3*worst {
		return x, false
	}
	if !flat {
		for i := range to {
			for k := range to {
				off = math.Max(off, offLine(to[0], to[i], to[k]))
			}
		}
		if off < 3*worst {
			return x, false
		}
	}
	return x, true
}

func squared(a, b [3]float64) float64 {
	x, y, z := a[0]-b[0], a[1]-b[1], a[2]-b[2]
	return x*x + y*y + z*z
}

// offLine is the distance of c from the line through a and b, zero when these are one.
func offLine(a, b, c [3]float64) float64 {
	long := squared(a, b)
	if long == 0 {
		return 0
	}
	along := 0.0
	for i := range a {
		along += (b[i] - a[i]) * (c[i] - a[i])
	}
	return math.Sqrt(math.Max(0, squared(a, c)-along*along/long))
}

// islands numbers the sets of units that held ties and meetings connect, in the order of their lowest unit. The control points, if they
// hold any, are in the island control.
func (w *weighed) islands(n *network) []int {
	if len(w.meetings) == 0 {
		w.control = -1
		return n.islands(w.held)
	}
	body := n.islands(w.held)
	parent := make([]int, len(n.units)+1)
	lowest := map[int]int{}
	for u := range body {
		parent[u] = u
		if l, ok := lowest[body[u]]; ok {
			parent[u] = l
		} else {
			lowest[body[u]] = u
		}
	}
	parent[len(n.units)] = len(n.units)
	find := func(i int) int {
		for parent[i] != i {
			i = parent[i]
		}
		return i
	}
	for i := range w.meetings {
		m := &w.meetings[i]
		support := m.marks
		for _, t := range m.ties {
			if w.held[t] {
				support++
			}
		}
		if support < m.least {
			continue
		}
		a, b := find(m.units[0]), find(m.units[1])
		parent[max(a, b)] = min(a, b)
	}
	count := 0
	island := make([]int, len(n.units)+1)
	for i := range island {
		if r := find(i); r == i {
			island[i] = count
			count++
		} else {
			island[i] = island[r]
		}
	}
	w.control = island[len(n.units)]
	if find(len(n.units)) == len(n.units) {
		w.control = -1
	}
	return island[:len(n.units)]
}

// split finds the marks of which a unit, by the start, knows another place than the rest of its island: there its mark is another one.
func (w *weighed) split(n *network, holdAll bool) {
	w.apart = map[known]bool{}
	if holdAll {
		return
	}
	n.eachMark(func(mark string, all []known) {
		slices.SortStableFunc(all, func(a, b known) int { return cmp.Compare(n.variance(a), n.variance(b)) })
		best := map[int]known{} // island -> who knows it best
		for _, k := range all {
			m := w.island[k.unit]
			first, ok := best[m]
			if !ok {
				best[m] = k
				continue
			}
			v := slow * (n.variance(k) + n.variance(first))
			if !(squared(n.placeOf(w, k), n.placeOf(w, first)) < evidence.DefaultFrameOptions().Bound*v) {
				w.apart[k] = true
			}
		}
	})
}

// holdSights holds what is less than a pose where its two ends share an island.
func (c *Coordinator) holdSights(n *network, w *weighed) {
	for i := range n.ties {
		t := &n.ties[i]
		if t.sight == nil || t.ruled != nil || w.island[t.from] != w.island[t.to] || n.loose(i) || t.wild() {
			continue
		}
		w.held[i] = true
		t.judge(msgs.Held, "taken as true on request", msgs.Evidence{})
	}
}
