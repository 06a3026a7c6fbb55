package adjust

import (
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// vertical is a keyframe whose front end knew up.
type vertical struct {
	pose  int32
	front lie.SE3 // in the frame of its session, whose z points up
	sigma float64
}

// addVerticals notes the first keyframe of each session of a robot whose frames are aligned with gravity: up in the frame of that keyframe is
// what its front end had, within the sigma of the robot. There are none in the plane, and none where control points carry a datum that
// is not level.
func (p *Problem) addVerticals(s *survey.Survey) {
	control := func() bool {
		for i := range s.Marks {
			if s.Marks[i].Role == survey.ControlPoint {
				return true
			}
		}
		return false
	}
	if s.Meta.Dimension == 2 || !s.Meta.Datum.Level && control() {
		return
	}
	sigma := map[string]float64{}
	for i := range s.Meta.Robots {
		sigma[s.Meta.Robots[i].ID] = s.Meta.Robots[i].Vertical()
	}
	for i := range s.Robots {
		r := &s.Robots[i]
		begun := map[uint32]bool{}
		for k := range r.Keyframes {
			f := &r.Keyframes[k]
			if sigma[r.ID] > 0 && !begun[f.Session] {
				begun[f.Session] = true
				p.verticals = append(p.verticals, vertical{p.Var[Key{r.ID, f.Session, f.ID}], Pose(f.Pose), sigma[r.ID]})
			}
		}
	}
}

// addLevels enters what the front ends knew of the vertical into a graph of the problem's poses.
func (p *Problem) addLevels(g *posegraph.Graph) {
	if len(p.verticals) == 0 {
		return
	}
	set := g.AddLevels()
	for _, v := range p.verticals {
		set.Add(v.pose, [3]float64(v.front.R[6:9]), v.sigma)
	}
}

// anchors are those of a graph of the problem's poses. An island that knows the vertical keeps a keyframe that does, for the frame that it is
// in must be level.
func (p *Problem) anchors(g *posegraph.Graph) []int32 {
	all := g.Anchors()
	if len(p.verticals) == 0 {
		return all
	}
	component, count := g.Components()
	upright := make([]int32, count) // 1 + the first keyframe that knows
	for i := len(p.verticals) - 1; i >= 0; i-- {
		upright[component[p.verticals[i].pose]] = p.verticals[i].pose + 1
	}
	for i, v := range all {
		if u := upright[component[v]]; u > 0 {
			all[i] = u - 1
		}
	}
	return all
}

// uprightBy returns what brings an island upright, by the first of its keyframes that knows the vertical.
func (p *Problem) uprightBy(island int32) (lie.SE3, bool) {
	for _, v := range p.verticals {
		if p.Island[v.pose] == island {
			return v.front.Mul(p.Graph.Values.Poses[v.pose].Inv()), true
		}
	}
	return lie.Identity(), false
}

// erect moves the islands that know the vertical so that the keyframe they keep is where its front end had it.
func (p *Problem) erect() {
	for _, v := range p.verticals {
		for _, a := range p.Anchors {
			if a == v.pose && p.Graph.Values.Poses[a] != v.front {
				by := v.front.Mul(p.Graph.Values.Poses[a].Inv())
				p.move(p.Island[a], &by)
				p.Graph.Values.Poses[a] = v.front
			}
		}
	}
}
