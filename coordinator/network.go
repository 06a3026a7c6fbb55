package coordinator

import (
	"math"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
)

// network is the present state of the survey laid out for a solution: units, their junctions as variables, and the ties whose
// two ends are junctions.
type network struct {
	dim   int // of a pose: 3 in the plane, 6 in space
	units []unit
	ties  []usable

	partial bool // there are ties that are less than a pose, or marks
}

// unit is one session with a summary. Its junctions are the variables base, base+1, ...
type unit struct {
	id    unitID
	robot *robot
	part  *msgs.Part
	model *unitModel
	base  int32

	refused bool // by a ruling: what it has seen of marks concerns nobody else
}

// usable is a tie with both ends in the network: units and junctions of its ends.
type usable struct {
	*tie
	from, to         int // units
	fromNode, toNode int // junctions within them
}

// unitModel is what a part of a summary says, decoded once for each summary.
type unitModel struct {
	poses []lie.SE3               // session_from_junction
	part  []int32                 // junction, then point -> connected part of the summary
	main  int32                   // the part with the most junctions
	nodes []int                   // junctions that joint covers, ascending
	joint []float64               // their joint covariance, on demand
	pairs map[[2]int]*[36]float64 // covariances of relative poses already asked for
	err   error                   // the part does not determine its own shape

	spread []float64 // variances of the places of junctions and points, on demand
}

// layout collects the network. Ties with a missing end are left open with that said.
func (c *Coordinator) layout() *network {
	n := &network{dim: c.width()}
	number := map[unitID]int{}
	base := int32(0)
	for _, r := range c.sorted() {
		if r.summary == nil {
			continue
		}
		for p := range r.summary.Parts {
			part := &r.summary.Parts[p]
			if len(part.Junctions) == 0 {
				continue
			}
			if r.units[p] == nil {
				r.units[p] = newUnitModel(c.width(), part)
			}
			id := unitID{r.name, part.Session}
			number[id] = len(n.units)
			ruled := c.rulingOnUnit(id)
			n.units = append(n.units, unit{id: id, robot: r, part: part, model: r.units[p], base: base, refused: ruled != nil && ruled.Verdict == msgs.Refused})
			base += int32(len(part.Junctions))
			n.partial = n.partial || len(part.Points) > 0
		}
	}
	for _, t := range c.order {
		u := usable{tie: t}
		missing, apart := "", ""
		for k, ref := range [2]*msgs.KeyRef{&t.msg.From, &t.msg.To} {
			r := c.robots[ref.Robot]
			if r == nil {
				missing = ref.Robot
				continue
			}
			_, j, ok := r.junction(ref)
			if !ok {
				missing = ref.Robot
				continue
			}
			if at := &n.units[number[unitID{ref.Robot, ref.Session}]]; !at.model.inMain(j) {
				apart = ref.Robot
			}
			if k == 0 {
				u.from, u.fromNode = number[unitID{ref.Robot, ref.Session}], j
			} else {
				u.to, u.toNode = number[unitID{ref.Robot, ref.Session}], j
			}
		}
		switch {
		case missing != "":
			t.judge(msgs.Open, waitingFor(missing), msgs.Evidence{})
		case apart != "":
			t.judge(msgs.Open, strayIn(apart), msgs.Evidence{})
		case u.from == u.to:
			t.judge(msgs.Open, ofOneSession(t.msg.From.Robot), msgs.Evidence{})
		default:
			n.ties = append(n.ties, u)
			n.partial = n.partial || t.sight != nil
		}
	}
	return n
}

// judge sets the verdict; what becomes of it in the end is recorded with the solution (Coordinator.record).
func (t *tie) judge(v msgs.VerdictKind, reason string, e msgs.Evidence) {
	t.finding.Verdict, t.finding.Reason, t.finding.Evidence = v, clip(reason), e
}

func newUnitModel(dim int, p *msgs.Part) *unitModel {
	m := &unitModel{poses: make([]lie.SE3, len(p.Junctions))}
	for i := range p.Junctions {
		m.poses[i] = lie.FromQuat(p.Junctions[i].Pose.T, p.Junctions[i].Pose.Q)
	}
	g := (&unit{part: p, model: m}).alone(dim)
	var count int
	m.part, count = g.Components()
	size := make([]int, count)
	for _, k := range m.part[:len(m.poses)] {
		size[k]++
	}
	for k := range size {
		if size[k] > size[m.main] {
			m.main = int32(k)
		}
	}
	return m
}

// inMain tells whether a junction, or a point numbered after the junctions, belongs to the main part.
func (m *unitModel) inMain(junction int) bool { return m.part[junction] == m.main }

// cliques adds the factors of u over poses alone to a batch, its junctions being variables from base on.
func (u *unit) cliques(to *posegraph.Cliques, base int32) {
	addCliques(u.part, u.model.poses, to, base)
}

func addCliques(p *msgs.Part, poses []lie.SE3, to *posegraph.Cliques, base int32) {
	for i := range p.Cliques {
		c := &p.Cliques[i]
		if len(c.Points) > 0 {
			continue
		}
		nodes, at := make([]int32, len(c.Nodes)), make([]lie.SE3, len(c.Nodes))
		for k, v := range c.Nodes {
			nodes[k], at[k] = base+int32(v), poses[v]
		}
		to.Add(nodes, at, c.H, c.B)
	}
}

// unitOf returns the unit that a variable belongs to.
func (n *network) unitOf(variable int32) int {
	u := 0
	for u+1 < len(n.units) && n.units[u+1].base <= variable {
		u++
	}
	return u
}

// prepare makes the joint covariance of the given junctions, which the evidence asks for pair by pair.
func (u *unit) prepare(dim int, nodes []int) {
	m := u.model
	if m.err != nil {
		return
	}
	if slices.Equal(m.nodes, nodes) {
		return
	}
	g := u.alone(dim)
	anchors := g.Anchors()
	solver, err := posegraph.NewSolver(g, anchors, sparse.Options{})
	if err != nil {
		m.err = err
		return
	}
	variables := make([]int32, len(nodes))
	for i, v := range nodes {
		variables[i] = int32(v)
	}
	m.nodes, m.pairs = nodes, map[[2]int]*[36]float64{}
	m.joint, m.err = solver.Joint(variables)
}

// relative returns the covariance of X_i^-1 X_j in its own tangent by the unit's summary alone, 6 x 6, i and j numbering the nodes
// of prepare: with A = Ad((X_i^-1 X_j)^-1), C = S_jj - A S_ij - S_ji A' + A S_ii A'.
func (m *unitModel) relative(dim, i, j int) [36]float64 {
	if known := m.pairs[[2]int{i, j}]; known != nil {
		return *known
	}
	var out [36]float64
	p := m.poses[m.nodes[j]].Between(m.poses[m.nodes[i]])
	full := p.Adjoint()
	active := []int{0, 1, 2, 3, 4, 5}
	if dim == 3 {
		active = []int{0, 1, 5}
	}
	d, n := dim, dim*len(m.nodes)
	sii, sij, sjj := m.joint[i*d*n+i*d:], m.joint[i*d*n+j*d:], m.joint[j*d*n+j*d:]
	var a, as, ai [36]float64 // A, A S_ij, A S_ii
	for r, x := range active {
		for c, y := range active {
			a[r*d+c] = full[6*x+y]
		}
	}
	for r := 0; r < d; r++ {
		for k := 0; k < d; k++ {
			v := a[r*d+k]
			for c := 0; c < d; c++ {
				as[r*d+c] += v * sij[k*n+c]
				ai[r*d+c] += v * sii[k*n+c]
			}
		}
	}
	for r, x := range active {
		for c, y := range active {
			v := sjj[r*n+c] - as[r*d+c] - as[c*d+r]
			for k := 0; k < d; k++ {
				v += ai[r*d+k] * a[c*d+k]
			}
			out[6*x+y] = v
		}
	}
	m.pairs[[2]int{i, j}] = &out
	return out
}

// widen embeds a Dim x Dim matrix of a tie into 6 x 6.
func widen(m []float64, dim int) (out [36]float64) {
	if dim == 3 {
		copy(out[:], m)
		return out
	}
	for r, x := range [3]int{0, 1, 5} {
		for c, y := range [3]int{0, 1, 5} {
			out[6*x+y] = m[3*r+c]
		}
	}
	return out
}

// strongest bounds the information that a tie may claim, 1/m^2 or 1/rad^2: nothing is measured to a nanometre.
const strongest = 1e18

// invert inverts the active part of a 6 x 6 information matrix by Cholesky; ok is false when it has no full rank,
// or more than [strongest].
func invert(m *[36]float64, dim int) (out [36]float64, ok bool) {
	active := []int{0, 1, 2, 3, 4, 5}
	if dim == 2 {
		active = []int{0, 1, 5}
	}
	d := len(active)
	var l, x [6][6]float64
	for i := 0; i < d; i++ {
		for j := 0; j <= i; j++ {
			v := m[6*active[i]+active[j]]
			for k := 0; k < j; k++ {
				v -= l[i][k] * l[j][k]
			}
			if i == j {
				if !(v > 1e-14*m[7*active[i]] && v < strongest) {
					return out, false
				}
				l[i][i] = math.Sqrt(v)
			} else {
				l[i][j] = v / l[j][j]
			}
		}
	}
	for c := 0; c < d; c++ { // L x = e_c
		for i := c; i < d; i++ {
			v := 0.0
			if i == c {
				v = 1
			}
			for k := c; k < i; k++ {
				v -= l[i][k] * x[k][c]
			}
			x[i][c] = v / l[i][i]
		}
	}
	for r := 0; r < d; r++ {
		for c := 0; c < d; c++ {
			for k := max(r, c); k < d; k++ {
				out[6*active[r]+active[c]] += x[k][r] * x[k][c]
			}
		}
	}
	return out, true
}
