package agent

import (
	"cmp"
	"fmt"
	"slices"

	"selvage/internal/lie"
)

// until returns how many keyframes of byTime are earlier than a moment, or not later.
func (s *session) until(stamp int64, including bool) int {
	at, _ := slices.BinarySearchFunc(s.byTime, stamp, func(v int32, stamp int64) int {
		if including && s.stamps[v] == stamp {
			return -1
		}
		return cmp.Compare(s.stamps[v], stamp)
	})
	return at
}

// resolve finds the keyframe with a stamp, or makes one between the two odometry keyframes around it. It fails when the track was not
// there at that time, or has no odometry across it.
func (s *session) resolve(stamp int64) (v int32, known bool) {
	at := s.until(stamp, false)
	if at < len(s.byTime) && s.stamps[s.byTime[at]] == stamp {
		return s.byTime[at], true
	}
	return s.insert(stamp, at)
}

// answer is resolve for a separator: the next summary says that the keyframe answers the stamp.
func (s *session) answer(stamp int64) (v int32, known bool) {
	if v, known = s.resolve(stamp); known && !slices.Contains(s.resolved[v], stamp) {
		s.resolved[v] = append(s.resolved[v], stamp)
	}
	return v, known
}

// insert makes a keyframe at a moment between two others, which are at-1 and at of byTime, by splitting the odometry across it. Its id is
// minus the stamp: the one-piece adjustment calls it the same.
func (s *session) insert(stamp int64, at int) (v int32, made bool) {
	if at == 0 || at == len(s.byTime) || s.knows(-stamp) {
		return -1, false
	}
	before, after := s.byTime[at-1], s.byTime[at]
	step := s.step(before, after)
	share := float64(stamp-s.stamps[before]) / float64(s.stamps[after]-s.stamps[before])
	if step < 0 || !(share > 0 && share < 1) { // stamps so far apart that their difference is no number
		return -1, false
	}
	v = int32(len(s.keys))
	poses := s.graph.Values.Poses
	s.factors.Split(int(step), v, share)
	s.graph.Values.Poses = append(poses, between(&poses[before], &poses[after], share, s.dim))
	s.front = append(s.front, between(&s.front[before], &s.front[after], share, s.dim))
	s.travel = append(s.travel, s.travel[before]+share*(s.travel[after]-s.travel[before]))
	s.index[-stamp] = v
	s.keys = append(s.keys, -stamp)
	s.stamps = append(s.stamps, stamp)
	s.separator = append(s.separator, false)
	s.place = append(s.place, -1)
	s.byTime = slices.Insert(s.byTime, at, v)
	s.leaving = append(s.leaving, -1)
	s.leave(v)
	s.inserted++
	s.dirty = true
	return v, true
}

// leave notes that the newest factor is a step that leaves variable i and may be split.
func (s *session) leave(i int32) {
	s.older = append(s.older, s.leaving[i])
	s.leaving[i] = int32(s.factors.Len() - 1)
}

// step returns the first factor from one variable to another that may be split, -1 when there is none.
func (s *session) step(from, to int32) int32 {
	found := int32(-1)
	for k := s.leaving[from]; k >= 0; k = s.older[k] {
		if s.factors.J[k] == to {
			found = k
		}
	}
	return found
}

// awaited is a moment that the odometry has not reached: of a sighting, or, with sighting -1, of a separator.
type awaited struct {
	stamp    int64
	sighting int32
}

// begins refuses a moment before the first keyframe.
func (s *session) begins(stamp int64) error {
	if first := s.stamps[s.byTime[0]]; stamp < first {
		return fmt.Errorf("stamp %d is before the first keyframe of session %d, at %d", stamp, s.id, first)
	}
	return nil
}

// await keeps a moment until the odometry reaches it.
func (s *session) await(w awaited) {
	s.awaiting = slices.Insert(s.awaiting, s.awaitedUntil(w.stamp, true), w)
}

func (s *session) awaitedUntil(stamp int64, including bool) int {
	at, _ := slices.BinarySearchFunc(s.awaiting, stamp, func(w awaited, stamp int64) int {
		if including && w.stamp == stamp {
			return -1
		}
		return cmp.Compare(w.stamp, stamp)
	})
	return at
}

// arrive looks whether awaited moments from one to another are on the track now.
func (s *session) arrive(from, to int64) {
	if from > to {
		from, to = to, from
	}
	first, last := s.awaitedUntil(from, false), s.awaitedUntil(to, true)
	n := first
	for _, w := range s.awaiting[first:last] {
		if !s.reached(w) {
			s.awaiting[n] = w
			n++
		}
	}
	s.awaiting = slices.Delete(s.awaiting, n, last)
}

// reached makes of an awaited moment what it is awaited for, once it is on the track.
func (s *session) reached(w awaited) bool {
	if w.sighting < 0 {
		v, known := s.answer(w.stamp)
		if known {
			s.separate(v)
		}
		return known
	}
	v, known := s.resolve(w.stamp)
	if known {
		s.begin(w.sighting, v)
	}
	return known
}

// separate makes a keyframe a separator and tells whether it was none.
func (s *session) separate(v int32) bool {
	if s.separator[v] {
		return false
	}
	s.separator[v] = true
	s.separators++
	return true
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
