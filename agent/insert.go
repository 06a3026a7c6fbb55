package agent

import (
	"cmp"
	"slices"

	"selvage/internal/lie"
)

// resolve finds the keyframe with a stamp, or makes one between the two odometry keyframes around it; the next summary says that it
// answers the stamp. It fails when the track was not there at that time, or has no odometry across it.
func (s *session) resolve(stamp int64) (id int64, known bool) {
	v := int32(slices.Index(s.stamps, stamp))
	if v < 0 {
		if v = s.insert(stamp); v < 0 {
			return 0, false
		}
	}
	if !slices.Contains(s.resolved[v], stamp) {
		s.resolved[v] = append(s.resolved[v], stamp)
	}
	return s.keys[v], true
}

// insert makes a keyframe at a moment between two others by splitting the odometry across it, and returns its variable, -1 when
// that cannot be. Its id is minus the stamp: the one-piece adjustment calls it the same.
func (s *session) insert(stamp int64) int32 {
	before, after := int32(-1), int32(-1)
	for v, t := range s.stamps {
		if t < stamp && (before < 0 || t > s.stamps[before]) {
			before = int32(v)
		}
		if t > stamp && (after < 0 || t < s.stamps[after]) {
			after = int32(v)
		}
	}
	if before < 0 || after < 0 || s.knows(-stamp) {
		return -1
	}
	step := -1
	for k := range s.factors.I {
		if s.factors.I[k] == before && s.factors.J[k] == after && !s.judges(int32(k)) {
			step = k
			break
		}
	}
	if step < 0 {
		return -1
	}
	share := float64(stamp-s.stamps[before]) / float64(s.stamps[after]-s.stamps[before])
	v := int32(len(s.keys))
	poses := s.graph.Values.Poses
	s.factors.Split(step, v, share)
	s.graph.Values.Poses = append(poses, between(&poses[before], &poses[after], share, s.dim))
	s.front = append(s.front, between(&s.front[before], &s.front[after], share, s.dim))
	s.travel = append(s.travel, s.travel[before]+share*(s.travel[after]-s.travel[before]))
	s.index[-stamp] = v
	s.keys = append(s.keys, -stamp)
	s.stamps = append(s.stamps, stamp)
	s.separator = append(s.separator, false)
	s.place = append(s.place, -1)
	s.inserted++
	s.dirty = true
	return v
}

// between returns the pose at a share of the geodesic from x to y.
func between(x, y *lie.SE3, share float64, dim int) lie.SE3 {
	step := x.Between(*y)
	twist := step.Log()
	for i := range twist {
		twist[i] *= share
	}
	z := x.Mul(lie.Exp(twist))
	if dim == 2 {
		z = lie.Planar(&z).Spatial()
	}
	return z
}

// along lists the variables in the order of the track, inserted keyframes where they belong.
func (s *session) along() []int32 {
	order := make([]int32, len(s.keys))
	for v := range order {
		order[v] = int32(v)
	}
	if s.inserted > 0 {
		slices.SortStableFunc(order, func(a, b int32) int { return cmp.Compare(s.travel[a], s.travel[b]) })
	}
	return order
}
