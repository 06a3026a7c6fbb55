package scenarios

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/survey"
)

// cov returns the sigmas as a measurement states them; what does not exist in the plane is not measured.
func (s Sigmas) cov(dimension int) survey.Cov {
	c := survey.Uncorrelated(s.Translation, s.Rotation)
	if dimension == 2 {
		c.Sigma[2], c.Sigma[3], c.Sigma[4] = math.Inf(1), math.Inf(1), math.Inf(1)
	}
	return c
}

// scaled returns the sigmas times k.
func (s Sigmas) scaled(k float64) Sigmas { return Sigmas{k * s.Translation, k * s.Rotation} }

// measure draws a measurement of the pose of b seen from a.
func measure(rng *rand.Rand, a, b *lie.SE3, c *survey.Cov) lie.SE3 {
	return a.Between(*b).Plus(noise(rng, &c.Sigma))
}

// poseOf writes a pose as the survey folder has it.
func poseOf(x *lie.SE3) survey.Pose { return survey.Pose{T: x.T, Q: x.Quat()} }

// leg is what one session of a front end sees of a robot's track.
type leg struct {
	robot   int
	session uint32
	first   int // row of its first keyframe among those of the robot
	track   track
}

// legs cuts the track of a robot where its front end restarts.
func legs(sc *Scenario, robot int, t *track) (cut []leg) {
	var at []int64
	for _, r := range sc.FrontEnd.Restarts {
		if r.Robot == allRobots || r.Robot == robotID(robot) {
			at = append(at, seconds(r.At))
		}
	}
	slices.Sort(at)
	first := 0
	for k := 1; k <= len(t.pose); k++ {
		restart := false
		for k < len(t.pose) && len(at) > 0 && at[0] <= t.atNS[k] {
			restart = restart || at[0] > t.atNS[k-1]
			at = at[1:]
		}
		if restart || k == len(t.pose) {
			part := track{t.pose[first:k], t.atNS[first:k], t.travel[first:k]}
			cut = append(cut, leg{robot, uint32(len(cut) + 1), first, part})
			first = k
		}
	}
	return cut
}

// record lets the front end measure along a leg and adds what it finds to the rows of the robot: keyframes dead reckoned from
// the odometry in the frame of the first, one odometry step between neighbours, then the closures, of which the last ones, as many as
// wrong says, are false.
func record(sc *Scenario, r *survey.Robot, l *leg, seed uint64) (wrong int, err error) {
	f := &sc.FrontEnd
	dim := sc.Dimension()
	t := &l.track
	part := r.ID
	if l.session > 1 {
		part = fmt.Sprintf("%s/%d", r.ID, l.session)
	}
	rng := stream(seed, "odometry/"+part)
	bias := f.HeadingBias * rng.NormFloat64()
	x := lie.Identity()
	for k := range t.pose {
		if k > 0 {
			length := t.travel[k] - t.travel[k-1]
			c := f.Odometry.scaled(math.Sqrt(length / sc.Fleet.KeyframeSpacing)).cov(dim)
			xi := noise(rng, &c.Sigma)
			for i := range xi {
				xi[i] *= f.OdometrySpread
			}
			xi[5] += bias * length
			z := t.pose[k-1].Between(t.pose[k]).Plus(xi)
			r.Relatives = append(r.Relatives, survey.Relative{
				Session: l.session, From: int64(k - 1), To: int64(k), Kind: survey.Odometry, Pose: poseOf(&z), Cov: c,
			})
			x = x.Mul(z).Plus(lie.Tangent{}) // clean of rounding
		}
		r.Keyframes = append(r.Keyframes, survey.Keyframe{Session: l.session, ID: int64(k), StampNS: t.atNS[k], HasStamp: true, Pose: poseOf(&x)})
	}
	found, wrong, err := closures(sc, t, stream(seed, "closures/"+part))
	for i := range found {
		found[i].Session = l.session
	}
	r.Relatives = append(r.Relatives, found...)
	return wrong, err
}

// closures finds where a robot comes back to its own track, and adds the false ones asked for, wrong of them, at
// the end.
func closures(sc *Scenario, t *track, rng *rand.Rand) (found []survey.Relative, wrong int, err error) {
	f := &sc.FrontEnd
	if f.ClosureRange == 0 {
		return nil, 0, nil
	}
	c := f.Closure.cov(sc.Dimension())
	s := newPlaces(f.ClosureRange, t)
	last := math.Inf(-1)
	for k := range t.pose {
		s.enter(t, 0, k)
		if t.travel[k]-last < f.ClosureSpacing {
			continue
		}
		j, best := -1, f.ClosureRange
		for _, cell := range s.index.around(t.pose[k].T) {
			for _, id := range cell {
				i := s.key[id]
				// Another time at the place, not the stretch just driven.
				if d := distance(t.pose[i].T, t.pose[k].T); d < best && t.travel[k]-t.travel[i] > 10*f.ClosureRange+10 {
					j, best = i, d
				}
			}
		}
		if j >= 0 {
			z := measure(rng, &t.pose[j], &t.pose[k], &c)
			found = append(found, survey.Relative{From: int64(j), To: int64(k), Kind: survey.Closure, Pose: poseOf(&z), Cov: c})
			last = t.travel[k]
		}
	}
	wrong = falseCount(len(found), f.FalseClosures)
	for range wrong {
		j, k, ok := apart(rng, t, t, 20*f.ClosureRange)
		if !ok {
			return nil, 0, errCramped
		}
		z := anywhere(rng, f.ClosureRange, sc.Dimension())
		found = append(found, survey.Relative{From: int64(min(j, k)), To: int64(max(j, k)), Kind: survey.Closure, Pose: poseOf(&z), Cov: c})
	}
	return found, wrong, nil
}

// places finds keyframes by their place, as far as they have been entered.
type places struct {
	index grid
	robot []int // of each entry
	key   []int
}

// newPlaces prepares for the keyframes of the tracks; what lies within reach metres is found.
func newPlaces(reach float64, tracks ...*track) *places {
	var b box
	for _, t := range tracks {
		for i := range t.pose {
			b.extend(t.pose[i].T)
		}
	}
	return &places{index: newGrid(b, max(reach, 1))}
}

func (s *places) enter(t *track, robot, k int) {
	s.index.add(t.pose[k].T, len(s.key))
	s.robot = append(s.robot, robot)
	s.key = append(s.key, k)
}
