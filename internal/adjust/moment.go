package adjust

import (
	"cmp"
	"fmt"
	"slices"

	"selvage/internal/lie"
)

// track is one session in the order of its stamps.
type track struct {
	at   []int64
	pose []int32 // variables
}

// moments finds the keyframe of a session at a moment, for ties that name their far end so.
type moments struct {
	problem *Problem
	tracks  map[Key]*track     // by robot and session, the id being zero
	steps   map[[2]int32]int32 // from one keyframe to another -> factor, once it was needed
}

// end returns the variable of what a tie or a sighting names: a keyframe, or a moment.
func (m *moments) end(robot string, session uint32, id, stamp int64, byStamp bool) (int32, error) {
	if byStamp {
		v, ok := m.find(Key{Robot: robot, Session: session}, stamp)
		if !ok {
			return 0, fmt.Errorf("no keyframe of robot %s, session %d, at or around the stamp %d", robot, session, stamp)
		}
		return v, nil
	}
	v, ok := m.problem.Var[Key{robot, session, id}]
	if !ok {
		return 0, fmt.Errorf("no keyframe %d of robot %s, session %d", id, robot, session)
	}
	return v, nil
}

// add notes the stamp of a variable.
func (m *moments) add(unit Key, stamp int64, variable int32) {
	t := m.tracks[unit]
	if t == nil {
		t = &track{}
		m.tracks[unit] = t
	}
	t.at, t.pose = append(t.at, stamp), append(t.pose, variable)
}

// sort puts all tracks into the order of time.
func (m *moments) sort() {
	for _, t := range m.tracks {
		if slices.IsSorted(t.at) {
			continue
		}
		order := make([]int, len(t.at))
		for i := range order {
			order[i] = i
		}
		slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(t.at[a], t.at[b]) })
		at, pose := make([]int64, len(order)), make([]int32, len(order))
		for i, k := range order {
			at[i], pose[i] = t.at[k], t.pose[k]
		}
		t.at, t.pose = at, pose
	}
}

// find returns the variable of a session at a moment. Between two keyframes it makes one, splitting the odometry across the moment,
// as the robot's agent does; its id is minus the stamp.
func (m *moments) find(unit Key, stamp int64) (int32, bool) {
	t := m.tracks[unit]
	if t == nil {
		return 0, false
	}
	k, exact := slices.BinarySearch(t.at, stamp)
	if exact {
		return t.pose[k], true
	}
	if k == 0 || k == len(t.at) {
		return 0, false
	}
	p, from, to := m.problem, t.pose[k-1], t.pose[k]
	f := p.Factors
	if m.steps == nil {
		m.steps = make(map[[2]int32]int32, f.Len())
		for i := f.Len() - 1; i >= 0; i-- { // the first of two
			m.steps[[2]int32{f.I[i], f.J[i]}] = int32(i)
		}
	}
	i, ok := m.steps[[2]int32{from, to}]
	if !ok {
		return 0, false
	}
	v := int32(len(p.Keys))
	share := float64(stamp-t.at[k-1]) / float64(t.at[k]-t.at[k-1])
	key := Key{unit.Robot, unit.Session, -stamp}
	if _, taken := p.Var[key]; taken {
		return 0, false
	}
	step := f.Split(int(i), v, share)
	delete(m.steps, [2]int32{from, to})
	m.steps[[2]int32{from, v}], m.steps[[2]int32{v, to}] = i, int32(f.Len()-1)
	x := p.Graph.Values.Poses[from].Mul(step)
	if p.Graph.Dim == 3 {
		x = lie.Planar(&x).Spatial()
	}
	p.Graph.Values.Poses = append(p.Graph.Values.Poses, x)
	p.Keys = append(p.Keys, key)
	p.Var[key] = v
	t.at, t.pose = slices.Insert(t.at, k, stamp), slices.Insert(t.pose, k, v)
	return v, true
}
