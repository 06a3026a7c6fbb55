package coordinator

import (
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// place writes the poses of unit u for the frame at datum.
func (j *joint) place(u int, datum lie.SE3) {
	unit := &j.n.units[u]
	for k, x := range unit.model.poses {
		y := datum.Mul(x)
		if j.graph.Dim == 3 {
			y = lie.Planar(&y).Spatial()
		}
		j.graph.Values.Poses[int(unit.base)+k] = y
	}
}

// pin puts every island's fixed junction exactly where its datum has it, moving the island along.
func (j *joint) pin() {
	for u := range j.n.units {
		m := j.member[u]
		i := &j.islands[m]
		if i.born == 0 || i.anchor != j.n.units[u].id {
			continue
		}
		node, _ := j.n.units[u].find(i.key)
		at := int(j.n.units[u].base) + node
		move := i.pose.Mul(j.graph.Values.Poses[at].Inv())
		for v := range j.n.units {
			if j.member[v] != m {
				continue
			}
			for k := range j.n.units[v].model.poses {
				x := &j.graph.Values.Poses[int(j.n.units[v].base)+k]
				*x = move.Mul(*x)
				if j.graph.Dim == 3 {
					*x = lie.Planar(x).Spatial()
				}
			}
		}
		j.graph.Values.Poses[at] = i.pose
	}
}

// startFromLast starts every unit where the last solution put it; every joined unit must have been there.
func (c *Coordinator) startFromLast(j *joint, w *weighed) bool {
	for u := range j.n.units {
		unit := &j.n.units[u]
		p, ok := c.places[unit.id]
		if j.islands[j.member[u]].born == 0 {
			j.place(u, lie.Identity())
			continue
		}
		if !ok || !p.joined || p.island.born != j.islands[j.member[u]].born {
			return false
		}
		var from, to []lie.SE3
		for k, id := range p.ids {
			if v, found := unit.find(id); found {
				from, to = append(from, unit.model.poses[v]), append(to, p.poses[k])
			}
		}
		if len(from) == 0 {
			return false
		}
		j.place(u, lie.Align(from, to))
	}
	j.pin()
	return true
}

// recall puts what the last solution placed exactly where that was: a robot whose summary still stands has followed it there, though its
// summary was condensed a little beside.
func (c *Coordinator) recall(j *joint) {
	for u := range j.n.units {
		unit := &j.n.units[u]
		if j.islands[j.member[u]].born == 0 {
			continue
		}
		p := c.places[unit.id]
		for k, id := range p.ids {
			if v, found := unit.find(id); found && unit.model.inMain(v) {
				j.graph.Values.Poses[int(unit.base)+v] = p.poses[k]
			}
		}
		for k, v := range j.pointsOf[u] {
			mark := unit.part.Points[k].Mark
			if i := slices.IndexFunc(p.points, func(x msgs.Point) bool { return x.Mark == mark }); i >= 0 {
				j.graph.Values.Points[v] = p.points[i].At
			}
		}
	}
}

// startFromEvidence starts every unit where the evidence put its frame.
func startFromEvidence(j *joint, w *weighed) bool {
	if w.start == nil {
		return false
	}
	for u := range j.n.units {
		j.place(u, w.start[u])
	}
	j.pin()
	return true
}

// startFromTies starts from the chordal solution over ties and the relative poses within the cliques.
func (c *Coordinator) startFromTies(j *joint, w *weighed) bool {
	if len(w.meetings) > 0 || len(j.points) > 0 { // whole poses alone do not connect what marks do
		return false
	}
	for u := range j.n.units {
		j.place(u, lie.Identity())
	}
	j.pin()
	g := posegraph.New(j.graph.Dim, j.graph.Values.Poses)
	b := g.AddBetween()
	d := g.Dim
	for u := range j.n.units {
		unit := &j.n.units[u]
		for i := range unit.part.Cliques {
			q := &unit.part.Cliques[i]
			m := len(q.B)
			for k := 1; k < len(q.Nodes); k++ {
				block := make([]float64, d*d)
				for r := 0; r < d; r++ {
					copy(block[r*d:], q.H[(d*(k-1)+r)*m+d*(k-1):][:d])
				}
				info := widen(block, c.cfg.Dim)
				x, y := unit.model.poses[q.Nodes[0]], unit.model.poses[q.Nodes[k]]
				b.Add(unit.base+int32(q.Nodes[0]), unit.base+int32(q.Nodes[k]), x.Between(y), &info)
			}
		}
	}
	for i := range j.n.ties {
		t := &j.n.ties[i]
		if j.factor[i] < 0 || !w.held[i] || t.sight != nil {
			continue
		}
		b.Add(j.n.units[t.from].base+int32(t.fromNode), j.n.units[t.to].base+int32(t.toNode), t.z, &t.info)
	}
	fixed := slices.DeleteFunc(slices.Clone(j.anchors), func(v int32) bool { return int(v) >= len(g.Values.Poses) }) // no marks here
	if posegraph.Chordal(g, fixed) != nil {
		return false
	}
	copy(j.graph.Values.Poses, g.Values.Poses)
	return true
}
