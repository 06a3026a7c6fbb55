package scenarios

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"selvage/agent"
	"selvage/coordinator"
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
	marks, err := r.sharedMarks()
	if err != nil {
		return nil, err
	}
	other := map[unit]map[string]string{} // marks that a session knows elsewhere than its island: under a name of their own
	var more []survey.Mark
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
			if marks[t.Island] == nil {
				marks[t.Island] = map[string][3]float64{}
			}
			for _, m := range t.Marks {
				at, name := t.DatumFromSession.Apply(m.Place), m.Name
				if shared, known := marks[t.Island][name]; known && distance(shared, at) > 1e-6 {
					if other[unit{id, t.Session}] == nil {
						other[unit{id, t.Session}] = map[string]string{}
					}
					name = fmt.Sprintf("%s/%s/%d", name, id, t.Session)
					other[unit{id, t.Session}][m.Name] = name
					more = append(more, survey.Mark{Name: name})
				}
				marks[t.Island][name] = at
			}
			for k := range t.IDs {
				final[adjust.Key{Robot: id, Session: t.Session, ID: t.IDs[k]}] = t.DatumFromSession.Mul(t.Poses[k])
			}
		}
	}
	heldTie := map[string]bool{}
	for _, f := range r.Coordinator.Findings() {
		heldTie[f.Tie] = f.Verdict == msgs.Held
	}
	known := r.known()
	var out []Gap
	for _, name := range names {
		if members[name] < 2 {
			continue
		}
		g := Gap{Island: name}
		in := func(robot string, session uint32) bool { return islandOf[unit{robot, session}] == name }
		part := &survey.Survey{Meta: s.Meta, Marks: slices.Concat(known.Marks, more)}
		for i := range part.Marks {
			if name != coordinator.ControlDatum { // its control points do not hold it
				part.Marks[i].Role = survey.PlainMark
			}
		}
		for i := range known.Robots {
			k := &known.Robots[i]
			robot := survey.Robot{
				ID:        k.ID,
				Keyframes: keep(k.Keyframes, func(x *survey.Keyframe) bool { return in(k.ID, x.Session) }),
				Relatives: keep(k.Relatives, func(x *survey.Relative) bool { return in(k.ID, x.Session) }),
				Sightings: keep(k.Sightings, func(x *survey.Sighting) bool { return in(k.ID, x.Session) }),
			}
			for n := range robot.Sightings {
				x := &robot.Sightings[n]
				if name, elsewhere := other[unit{k.ID, x.Session}][x.Mark]; elsewhere {
					x.Mark = name
				}
			}
			if len(robot.Keyframes) > 0 {
				part.Robots = append(part.Robots, robot)
				g.Robots = append(g.Robots, robot.ID)
			}
		}
		part.Ties = keep(known.Ties, func(t *survey.Tie) bool {
			return heldTie[t.ID] && in(t.FromRobot, t.FromSession) && in(t.ToRobot, t.ToSession)
		})
		if err := g.compute(part, final, marks[name]); err != nil {
			return nil, fmt.Errorf("island %s: %w", name, err)
		}
		out = append(out, g)
	}
	return out, nil
}

// sharedMarks returns where each island has the marks that several of its sessions know, by name. A session that the coordinator believes to
// mean another mark by a name has it elsewhere.
func (r *Run) sharedMarks() (map[string]map[string][3]float64, error) {
	out := map[string]map[string][3]float64{}
	placed, err := r.Coordinator.Marks()
	for i := range placed {
		m := &placed[i]
		if out[m.Island] == nil {
			out[m.Island] = map[string][3]float64{}
		}
		at, known := out[m.Island][m.Mark]
		better := m.Sessions > 1
		if m.Role == coordinator.Control { // the one that the control point holds
			better = distance(m.At, m.Known) < distance(at, m.Known)
		}
		if !known || better {
			out[m.Island][m.Mark] = m.At
		}
	}
	return out, err
}

// doubted names the control points whose coordinates contradict all else, the worst first.
func (r *Run) doubted() (names []string) {
	placed, err := r.Coordinator.Marks()
	if err != nil {
		return nil
	}
	slices.SortStableFunc(placed, func(a, b coordinator.PlacedMark) int { return cmp.Compare(b.Doubt, a.Doubt) })
	for i := range placed {
		if placed[i].Doubt > 1 {
			names = append(names, placed[i].Mark)
		}
	}
	return names
}

func keep[T any](all []T, which func(*T) bool) (out []T) {
	for i := range all {
		if which(&all[i]) {
			out = append(out, all[i])
		}
	}
	return out
}

// compute costs the fleet's final poses and marks, and adjusts the same measurements in one piece, from its own start and from there.
func (g *Gap) compute(part *survey.Survey, final map[adjust.Key]lie.SE3, marks map[string][3]float64) error {
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
		}
		if err := p.Begin(start); err != nil {
			return err
		}
		if start == adjust.Given {
			for k := range p.Points {
				if at, known := marks[part.Marks[p.Points[k].Mark].Name]; known {
					p.Graph.Values.Points[k] = at
				}
			}
			g.Fleet = p.Graph.Cost()
		}
		if err := p.Analyse(1); err != nil {
			return err
		}
		g.Whole = math.Min(g.Whole, p.Solve(o).Cost)
	}
	return nil
}
