package scenarios

import (
	"fmt"
	"math"

	"selvage/agent"
	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
	"selvage/msgs"
)

// Gap compares the fleet's own final poses with the adjustment of the same data in one piece, for one island of joined robots.
type Gap struct {
	Island string
	Robots []string
	Fleet  float64 // F at the agents' own final poses
	Whole  float64 // F of the one-piece adjustment over the same held ties and loop closures
}

// Relative is the gap as a share of the one-piece cost, or of 1 when that is smaller.
func (g *Gap) Relative() float64 { return (g.Fleet - g.Whole) / math.Max(g.Whole, 1) }

// tracks returns every agent's map, agent by agent.
func (r *Run) tracks() [][]agent.Track {
	out := make([][]agent.Track, len(r.Agents))
	for i, a := range r.Agents {
		out[i] = a.Tracks()
	}
	return out
}

// gaps computes the gap of every island with more than one session. The one-piece adjustment starts at the chordal solution, and
// once more at the fleet's poses; the lower cost counts.
func (r *Run) gaps() ([]Gap, error) {
	s := r.Outing.Survey
	type unit struct {
		robot   string
		session uint32
	}
	islandOf := map[unit]string{}
	final := map[adjust.Key]lie.SE3{}
	var names []string
	members := map[string]int{}
	for i, tracks := range r.tracks() {
		for _, t := range tracks {
			if !t.Joined {
				continue
			}
			id := s.Robots[i].ID
			islandOf[unit{id, t.Session}] = t.Island
			if members[t.Island] == 0 {
				names = append(names, t.Island)
			}
			members[t.Island]++
			for k := range t.IDs {
				final[adjust.Key{Robot: id, Session: t.Session, ID: t.IDs[k]}] = t.DatumFromSession.Mul(t.Poses[k])
			}
		}
	}
	heldTie := map[string]bool{}
	for _, f := range r.Coordinator.Findings() {
		heldTie[f.Tie] = f.Verdict == msgs.Held
	}
	closure := r.closureVerdicts()
	var out []Gap
	for _, name := range names {
		if members[name] < 2 {
			continue
		}
		g := Gap{Island: name}
		part := &survey.Survey{Meta: s.Meta}
		for i := range s.Robots {
			robot := survey.Robot{ID: s.Robots[i].ID}
			for _, k := range s.Robots[i].Keyframes {
				if islandOf[unit{robot.ID, k.Session}] == name {
					robot.Keyframes = append(robot.Keyframes, k)
				}
			}
			for k, m := range s.Robots[i].Relatives {
				if closure[i][k] == msgs.Held && islandOf[unit{robot.ID, m.Session}] == name {
					robot.Relatives = append(robot.Relatives, m)
				}
			}
			if len(robot.Keyframes) > 0 {
				part.Robots = append(part.Robots, robot)
				g.Robots = append(g.Robots, robot.ID)
			}
		}
		for _, t := range s.Ties {
			if heldTie[t.ID] && islandOf[unit{t.FromRobot, t.FromSession}] == name && islandOf[unit{t.ToRobot, t.ToSession}] == name {
				part.Ties = append(part.Ties, t)
			}
		}
		if err := g.compute(part, final); err != nil {
			return nil, fmt.Errorf("island %s: %w", name, err)
		}
		out = append(out, g)
	}
	return out, nil
}

func (g *Gap) compute(part *survey.Survey, final map[adjust.Key]lie.SE3) error {
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-14
	g.Whole = math.Inf(1)
	for _, start := range []adjust.Start{adjust.Auto, adjust.Given} {
		p, err := adjust.New(part, nil)
		if err != nil {
			return err
		}
		if start == adjust.Given {
			for v, key := range p.Keys {
				x := final[key]
				if part.Meta.Dimension == 2 {
					x = lie.Planar(&x).Spatial()
				}
				p.Graph.Values.Poses[v] = x
			}
			g.Fleet = p.Graph.Cost()
		} else if err := p.Begin(start); err != nil {
			return err
		}
		if err := p.Analyse(1); err != nil {
			return err
		}
		g.Whole = math.Min(g.Whole, p.Solve(o).Cost)
	}
	return nil
}
