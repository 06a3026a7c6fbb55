package coordinator

import (
	"cmp"
	"fmt"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/msgs"
)

// weighed is what is believed before the joint solution: which ties are held, which units share a datum, and where their frames
// lie roughly in it (in the frame of the island's lowest unit).
type weighed struct {
	held   []bool    // per usable tie
	island []int     // per unit
	start  []lie.SE3 // per unit; nil with HoldAll

	meetings []meeting      // that join units beside whole poses
	control  int            // the island that control marks hold, -1 for none
	apart    map[known]bool // marks that are others than those of their island

	believed []bool    // per usable tie: held before rulings
	alone    []opinion // per usable tie: of those ruled held
}

// weigh decides which ties to believe.
func (c *Coordinator) weigh(n *network) weighed {
	w := c.believe(n)
	c.overrule(n, &w)
	return w
}

// believe decides on the ties that nobody has ruled on.
func (c *Coordinator) believe(n *network) weighed {
	if c.cfg.HoldAll {
		w := weighed{held: make([]bool, len(n.ties)), control: -1}
		for i := range n.ties {
			if n.ties[i].ruled != nil || n.ties[i].sight != nil {
				continue
			}
			if n.loose(i) {
				n.ties[i].judge(msgs.Open, n.looseReason(i), msgs.Evidence{})
				continue
			}
			if n.ties[i].wild() {
				n.ties[i].judge(msgs.Open, wildReason, msgs.Evidence{})
				continue
			}
			w.held[i] = true
			n.ties[i].judge(msgs.Held, "taken as true on request", msgs.Evidence{})
		}
		w.island = n.islands(w.held)
		return w
	}
	// The evidence sees only junctions that ties touch, in the order of the track.
	touched := make([]map[int]int, len(n.units)) // junction -> node
	for u := range touched {
		touched[u] = map[int]int{}
	}
	for i := range n.ties {
		if t := &n.ties[i]; t.regular && !t.ruledOut() {
			touched[t.from][t.fromNode], touched[t.to][t.toNode] = 0, 0
		}
	}
	units := make([]evidence.Unit, len(n.units))
	for u := range units {
		units[u] = n.units[u].evidence(c.width(), touched[u])
	}
	var judged []int
	for i := range n.ties {
		t := &n.ties[i]
		switch {
		case t.ruledOut():
		case t.sight != nil: // see align
		case !t.regular:
			t.judge(msgs.Open, n.lessThanPose(i), msgs.Evidence{})
		case n.loose(i):
			t.judge(msgs.Open, n.looseReason(i), msgs.Evidence{})
		default:
			judged = append(judged, i)
		}
	}
	ties := make([]evidence.Tie, len(judged))
	for k, i := range judged {
		t := &n.ties[i]
		ties[k] = evidence.Tie{
			Name: t.msg.ID, From: evidence.End{Unit: t.from, Node: touched[t.from][t.fromNode]},
			To: evidence.End{Unit: t.to, Node: touched[t.to][t.toNode]}, Z: t.z, Cov: t.cov,
		}
	}
	r := evidence.Decide(units, ties, c.cfg.Evidence)
	w := weighed{held: make([]bool, len(n.ties)), control: -1, island: r.Island, start: r.DatumFromUnit}
	for k, i := range judged {
		f := &r.Ties[k]
		e := msgs.Evidence{Statistic: f.Statistic, DoF: f.DoF, Limit: f.Limit, Places: f.Places, Margin: float64(f.Margin)}
		verdict := msgs.Open
		switch f.Verdict {
		case evidence.Held:
			verdict = msgs.Held
			w.held[i] = true
		case evidence.Refused:
			verdict = msgs.Refused
		}
		n.ties[i].judge(verdict, f.Reason, e)
	}
	return w
}

// loose tells whether a unit of tie i has a summary that leaves a junction free.
func (n *network) loose(i int) bool {
	return n.units[n.ties[i].from].model.err != nil || n.units[n.ties[i].to].model.err != nil
}

// wild tells whether a tie claims more information than [strongest].
func (t *tie) wild() bool {
	if t.sight != nil {
		return !t.sight.sound || t.sight.dof == 0
	}
	for i := range 6 {
		if t.info[7*i] > strongest {
			return true
		}
	}
	return false
}

// evidence describes a unit by the junctions that ties touch; it numbers them in node.
func (u *unit) evidence(width int, node map[int]int) evidence.Unit {
	var nodes []int
	for j := range u.part.Junctions {
		if _, ok := node[j]; ok {
			nodes = append(nodes, j)
		}
	}
	travel := func(j int) float64 { return u.part.Junctions[j].TravelM }
	slices.SortStableFunc(nodes, func(a, b int) int { return cmp.Compare(travel(a), travel(b)) }) // ids need not follow the track
	for k, j := range nodes {
		node[j] = k
	}
	u.prepare(width, nodes)
	e := evidence.Unit{Name: u.id.robot}
	if len(u.robot.summary.Parts) > 1 {
		e.Name = fmt.Sprintf("%s session %d", u.id.robot, u.id.session)
	}
	for _, j := range nodes {
		e.Poses = append(e.Poses, u.model.poses[j])
		e.TravelM = append(e.TravelM, u.part.Junctions[j].TravelM)
	}
	e.Covariance = func(i, j int) [36]float64 { return u.model.relative(width, i, j) }
	return e
}

// islands numbers the sets of units that held ties of whole poses connect, in the order of their lowest unit.
func (n *network) islands(held []bool) []int {
	parent := make([]int, len(n.units))
	for i := range parent {
		parent[i] = i
	}
	find := func(i int) int {
		for parent[i] != i {
			i = parent[i]
		}
		return i
	}
	for i := range n.ties {
		if !held[i] || n.ties[i].sight != nil {
			continue
		}
		a, b := find(n.ties[i].from), find(n.ties[i].to)
		parent[max(a, b)] = min(a, b)
	}
	count := 0
	island := make([]int, len(n.units))
	for i := range island {
		if r := find(i); r == i {
			island[i] = count
			count++
		} else {
			island[i] = island[r]
		}
	}
	return island
}
