package coordinator

import (
	"errors"
	"fmt"

	"selvage/internal/lie"
	"selvage/msgs"
)

// publish makes the solution the newest epoch: a correction to every robot with a summary, a verdict for every tie whose verdict
// or ruling changed.
func (c *Coordinator) publish(j *joint) ([]Publish, error) {
	sigma, err := j.covariance()
	if err != nil {
		return nil, err
	}
	c.epoch++
	places := make(map[unitID]placement, len(j.n.units))
	corrections := map[*robot]*msgs.Correction{}
	clique, marked := 0, 0 // those over poses alone, those with marks
	for u := range j.n.units {
		unit := &j.n.units[u]
		r := unit.robot
		m := corrections[r]
		if m == nil {
			m = &msgs.Correction{
				Fleet: c.cfg.Fleet, Robot: r.name, Epoch: c.Epoch(), Term: c.cfg.Term, SummaryVersion: r.summary.Version, Dim: c.width(),
			}
			corrections[r] = m
		}
		i := j.islands[j.member[u]]
		part := msgs.CorrectedPart{Session: unit.id.session}
		if i.born == 0 {
			for q := range unit.part.Cliques {
				if len(unit.part.Cliques[q].Points) > 0 {
					marked++
				} else {
					clique++
				}
			}
			places[unit.id] = placement{datum: lie.Identity()}
			m.Parts = append(m.Parts, part)
			continue
		}
		p := placement{island: i, joined: true}
		at := j.graph.Values.Poses[unit.base:][:len(unit.part.Junctions)]
		p.datum = unit.frame(at)
		if c.cfg.Dim == 2 {
			p.datum = lie.Planar(&p.datum).Spatial()
		}
		for k, x := range at {
			if !unit.model.inMain(k) { // connected with nothing: where the frame has it
				x = p.datum.Mul(unit.model.poses[k])
			}
			p.ids = append(p.ids, unit.part.Junctions[k].ID)
			p.poses = append(p.poses, x)
			part.Poses = append(part.Poses, wirePose(&x, c.cfg.Dim))
		}
		for k, v := range j.pointsOf[u] {
			p.points = append(p.points, msgs.Point{Mark: unit.part.Points[k].Mark, At: j.graph.Values.Points[v]})
		}
		part.Points = p.points
		places[unit.id] = p
		part.Joined, part.IDs, part.Island = true, p.ids, i.name()
		part.DatumFromSession = wirePose(&p.datum, c.cfg.Dim)
		for q := range unit.part.Cliques {
			part.CovNodes = append(part.CovNodes, unit.part.Cliques[q].Nodes)
			if len(unit.part.Cliques[q].Points) > 0 {
				part.Cov = append(part.Cov, j.marks.Joint(marked, sigma))
				marked++
				continue
			}
			part.Cov = append(part.Cov, j.cliques.Joint(clique, sigma))
			clique++
		}
		m.Parts = append(m.Parts, part)
	}
	c.places, c.joint = places, j
	c.promise.last, c.promise.next = c.promise.next, promised{}

	var out []Publish
	var failed error // what one robot makes impossible to write is no loss to the others
	for _, r := range c.sorted() {
		m := corrections[r]
		if m == nil {
			continue
		}
		payload, err := m.Marshal()
		if err != nil {
			failed = errors.Join(failed, fmt.Errorf("correction for %s: %w", r.name, err))
			r.corr, r.used = nil, r.summary.Version
			continue
		}
		r.corr, r.corrNS, r.tries, r.used = payload, c.now, 0, r.summary.Version
		out = append(out, Publish{r.name, msgs.KindCorrection, payload})
	}
	for _, t := range c.order {
		if !c.record(t) {
			continue
		}
		f := &t.finding
		v := msgs.Verdict{
			Fleet: c.cfg.Fleet, Robot: t.msg.Header.Robot, Tie: t.msg.ID, Verdict: f.Verdict, Reason: f.Reason, Evidence: f.Evidence,
			Epoch: c.Epoch(), Term: c.cfg.Term, StampNS: c.now,
		}
		payload, err := v.Marshal()
		if err != nil {
			failed = errors.Join(failed, fmt.Errorf("verdict on tie %s: %w", v.Tie, err))
			continue
		}
		out = append(out, Publish{v.Robot, msgs.KindVerdict, payload})
	}
	return out, failed
}

// frame fits datum_from_session to the poses of the junctions of the main part in the datum.
func (u *unit) frame(poses []lie.SE3) lie.SE3 {
	var from, to []lie.SE3
	for k, x := range poses {
		if u.model.inMain(k) {
			from, to = append(from, u.model.poses[k]), append(to, x)
		}
	}
	return lie.Align(from, to)
}

// wirePose writes a pose for the wire, exactly planar in the plane.
func wirePose(x *lie.SE3, dim int) msgs.Pose {
	p := msgs.Pose{T: x.T, Q: x.Quat()}
	if dim == 2 {
		p.T[2], p.Q[0], p.Q[1] = 0, 0, 0
	}
	return p
}

// Placed is one unit of the newest epoch.
type Placed struct {
	Robot            string
	Session          uint32
	Joined           bool
	Island           string // names the datum; empty when not joined
	DatumFromSession lie.SE3
	IDs              []int64      // junctions
	Poses            []lie.SE3    // datum_from_junction
	Points           []msgs.Point // marks that it knows, in the datum
}

// Map returns the newest epoch, units by robot and session. Its slices belong to the coordinator.
func (c *Coordinator) Map() []Placed {
	var out []Placed
	for _, r := range c.sorted() {
		if r.summary == nil {
			continue
		}
		for i := range r.summary.Parts {
			id := unitID{r.name, r.summary.Parts[i].Session}
			p, ok := c.places[id]
			if !ok {
				continue
			}
			m := Placed{Robot: id.robot, Session: id.session, Joined: p.joined, DatumFromSession: p.datum, IDs: p.ids, Poses: p.poses, Points: p.points}
			if p.joined {
				m.Island = p.island.name()
			}
			out = append(out, m)
		}
	}
	return out
}
