package coordinator

import (
	"fmt"
	"math"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
)

// Role is what a mark of the base is for.
type Role uint8

// A control mark carries the datum; a check mark takes no part in any fit and shows how well it came out.
const (
	Control Role = iota + 1
	Check
)

// Mark is a mark whose coordinates in the datum are known at the base. They are never sent to a robot.
type Mark struct {
	Name  string
	Role  Role
	At    [3]float64 // metres; the third is not used in the plane
	Sigma [3]float64 // standard deviations, metres; +Inf for a coordinate that is not known
}

// check panics on marks that make no sense: they come from whoever starts the base.
func (c *Config) check() {
	named := map[string]bool{}
	for i := range c.Marks {
		m := &c.Marks[i]
		if m.Role != Control && m.Role != Check || named[m.Name] {
			panic(fmt.Sprintf("coordinator: mark %q: a role, and each name once", m.Name))
		}
		named[m.Name] = true
		for k := range c.Dim {
			if !(m.Sigma[k] > 0) || math.IsNaN(m.At[k]) || math.IsInf(m.At[k], 0) {
				panic(fmt.Sprintf("coordinator: mark %q: finite coordinates and sigmas above zero", m.Name))
			}
		}
	}
}

// whole tells whether all coordinates of a mark are known.
func (m *Mark) whole(dim int) bool {
	for i := range dim {
		if math.IsInf(m.Sigma[i], 1) {
			return false
		}
	}
	return true
}

func (m *Mark) variance(dim int) float64 {
	v := 0.0
	for i := range dim {
		v += m.Sigma[i] * m.Sigma[i]
	}
	return v
}

// info is the information matrix of a control mark.
func (m *Mark) info(dim int) (info lie.Mat3) {
	for i := range dim {
		if !math.IsInf(m.Sigma[i], 1) {
			info[4*i] = 1 / (m.Sigma[i] * m.Sigma[i])
		}
	}
	return info
}

// control returns the control mark of a name whose coordinates are all known, nil for none.
func (c *Coordinator) control(name string) *Mark {
	if m := c.marks[name]; m != nil && m.Role == Control && m.whole(c.cfg.Dim) {
		return m
	}
	return nil
}

// known is a mark as one unit has it: a point of its summary.
type known struct{ unit, point int }

// eachMark calls f for the marks of all summaries, by name, with the units that have them as points.
func (n *network) eachMark(f func(mark string, all []known)) {
	of := map[string][]known{}
	var names []string
	for u := range n.units {
		for p := range n.units[u].part.Points {
			name := n.units[u].part.Points[p].Mark
			if n.units[u].refused || !n.units[u].model.inMain(len(n.units[u].model.poses)+p) {
				continue
			}
			if of[name] == nil {
				names = append(names, name)
			}
			of[name] = append(of[name], known{u, p})
		}
	}
	slices.Sort(names)
	for _, name := range names {
		f(name, of[name])
	}
}

// placeOf returns where the starts have a mark.
func (n *network) placeOf(w *weighed, k known) [3]float64 {
	return w.start[k.unit].Apply(n.units[k.unit].part.Points[k.point].At)
}

// variance returns that of the place of a mark in the frame of its unit, m^2.
func (n *network) variance(k known) float64 {
	u := &n.units[k.unit]
	return u.spread(n.dim)[len(u.model.poses)+k.point]
}

// spread returns the variances of the places of the junctions, then of the points of a unit in its own frame, m^2, by its summary alone.
func (u *unit) spread(dim int) []float64 {
	m := u.model
	if m.spread != nil {
		return m.spread
	}
	g := u.alone(dim)
	m.spread = make([]float64, g.Variables())
	solver, err := posegraph.NewSolver(g, g.Anchors(), sparse.Options{})
	if err != nil {
		return m.spread
	}
	sigma, err := solver.Covariance()
	if err != nil {
		m.err = err
		return m.spread
	}
	for v := range m.spread {
		q := sigma.Of(int32(v))
		if q == nil {
			continue
		}
		width := 3
		if v < len(m.poses) {
			width = dim
		}
		for i := range min(dim/3+1, 3) {
			m.spread[v] += q[i*(width+1)]
		}
	}
	return m.spread
}

// alone returns the summary of a unit as a problem of its own.
func (u *unit) alone(dim int) *posegraph.Graph {
	g := posegraph.New(dim, slices.Clone(u.model.poses))
	g.Values.Points = placesOf(u.part)
	u.cliques(g.AddCliques(), 0)
	if len(g.Values.Points) > 0 {
		own := make([]int32, len(g.Values.Points))
		for k := range own {
			own[k] = int32(k)
		}
		addMarkCliques(u.part, u.model.poses, g.AddMarkCliques(), 0, own)
	}
	return g
}

func placesOf(p *msgs.Part) (places [][3]float64) {
	for i := range p.Points {
		places = append(places, p.Points[i].At)
	}
	return places
}

// addMarkCliques adds the factors of a part that have points; points numbers those of the graph.
func addMarkCliques(p *msgs.Part, poses []lie.SE3, to *posegraph.MarkCliques, base int32, points []int32) {
	for i := range p.Cliques {
		c := &p.Cliques[i]
		if len(c.Points) == 0 {
			continue
		}
		nodes, at := make([]int32, len(c.Nodes)), make([]lie.SE3, len(c.Nodes))
		for k, v := range c.Nodes {
			nodes[k], at[k] = base+int32(v), poses[v]
		}
		marks, places := make([]int32, len(c.Points)), make([][3]float64, len(c.Points))
		for k, v := range c.Points {
			marks[k], places[k] = points[v], p.Points[v].At
		}
		to.Add(nodes, at, marks, places, c.H, c.B)
	}
}

// point is a variable of the joint problem: a mark as one island knows it.
type point struct {
	mark   string
	island int
	units  []int // that know it
}

// addPoints makes the variables of the marks: one for each island that knows it, and one for each unit whose mark is another.
func (j *joint) addPoints(w *weighed) {
	j.pointsOf = make([][]int32, len(j.n.units))
	type place struct {
		mark   string
		island int
	}
	number := map[place]int32{}
	for u := range j.n.units {
		part := j.n.units[u].part
		for p := range part.Points {
			here := place{part.Points[p].Mark, w.island[u]}
			k, ok := number[here]
			alone := w.apart[known{u, p}] || j.n.units[u].refused || !j.n.units[u].model.inMain(len(j.n.units[u].model.poses)+p)
			if !ok || alone {
				k = int32(len(j.points))
				j.points = append(j.points, point{mark: here.mark, island: here.island})
				if !alone {
					number[here] = k
				}
			}
			j.points[k].units = append(j.points[k].units, u)
			j.pointsOf[u] = append(j.pointsOf[u], k)
		}
	}
	j.graph.Values.Points = make([][3]float64, len(j.points))
}

// addControl enters the control marks of the island that they hold. A mark that its island knows elsewhere by the start is not believed.
func (c *Coordinator) addControl(j *joint, w *weighed) {
	if w.control < 0 {
		return
	}
	priors := j.graph.AddPointPriors()
	j.priors = priors
	for k := range j.points {
		p := &j.points[k]
		m := c.marks[p.mark]
		if p.island != w.control || m == nil || m.Role != Control || !c.cfg.HoldAll && !c.agrees(j, w, k, m) {
			continue
		}
		info := m.info(c.cfg.Dim)
		priors.Add(int32(k), c.flat(m.At), &info)
	}
}

// agrees tells whether the start has point k where control mark m is.
func (c *Coordinator) agrees(j *joint, w *weighed, k int, m *Mark) bool {
	for _, u := range j.points[k].units {
		p := slices.Index(j.pointsOf[u], int32(k))
		at := j.n.placeOf(w, known{u, p})
		sum := 0.0
		for i := range c.cfg.Dim {
			if !math.IsInf(m.Sigma[i], 1) {
				sum += (at[i] - m.At[i]) * (at[i] - m.At[i]) / (slow*j.n.variance(known{u, p}) + m.Sigma[i]*m.Sigma[i])
			}
		}
		if sum < 16.266 {
			return true
		}
	}
	return false
}

// placePoints puts the points where the frames of those that know them have them, in the mean.
func (j *joint) placePoints() {
	for k := range j.graph.Values.Points {
		j.graph.Values.Points[k] = [3]float64{}
	}
	for u := range j.n.units {
		unit := &j.n.units[u]
		if len(j.pointsOf[u]) == 0 {
			continue
		}
		frame := unit.frame(j.graph.Values.Poses[unit.base:][:len(unit.part.Junctions)])
		if j.graph.Dim == 3 {
			frame = lie.Planar(&frame).Spatial()
		}
		for p, k := range j.pointsOf[u] {
			at := frame.Apply(unit.part.Points[p].At)
			for i := range at {
				j.graph.Values.Points[k][i] += at[i] / float64(len(j.points[k].units))
			}
		}
	}
}

// PlacedMark is a mark of the newest epoch, as one island knows it.
type PlacedMark struct {
	Mark     string
	Role     Role // zero for a mark of which the base knows no coordinates
	Island   string
	At       [3]float64 // in the datum of the island
	Cov      lie.Mat3   // of At, m^2
	Sessions int        // that know it
	Known    [3]float64 // for a control or check mark: its coordinates
	Doubt    float64    // test statistic of a control mark's coordinates against all else, over its bound: beyond 1 they contradict it
}

// Marks returns the marks of the newest epoch, by name and then in the order of the islands.
func (c *Coordinator) Marks() ([]PlacedMark, error) {
	j := c.joint
	if j == nil {
		return nil, nil
	}
	sigma, err := j.covariance()
	if err != nil {
		return nil, err
	}
	var out []PlacedMark
	for k := range j.points {
		p := &j.points[k]
		i := j.islands[p.island]
		if i.born == 0 {
			continue
		}
		x := PlacedMark{Mark: p.mark, Island: i.name(), At: j.graph.Values.Points[k], Sessions: len(p.units)}
		copy(x.Cov[:], sigma.Of(j.graph.Point(int32(k))))
		if c.cfg.Dim == 2 {
			x.Cov[8] = 0
		}
		if m := c.marks[p.mark]; m != nil {
			x.Role, x.Known, x.Doubt = m.Role, m.At, c.doubt(j, int32(k), sigma)
		}
		out = append(out, x)
	}
	slices.SortStableFunc(out, func(a, b PlacedMark) int {
		switch {
		case a.Mark < b.Mark:
			return -1
		case a.Mark > b.Mark:
			return 1
		}
		return 0
	})
	return out, nil
}
