package agent

import (
	"errors"
	"fmt"
	"math"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// Sight is what a sensor tells of the place of something: a spot on another robot, or a mark.
type Sight struct {
	Sense posegraph.Sense
	// Value is x, y, z in the frame of the sensor for a position, else range, bearing and elevation, metres and radians; the bearing is
	// counted from x forward towards y, the elevation from the x-y plane towards z. What is not measured is not looked at, as is z, or the
	// elevation, in the plane.
	Value [3]float64
	Info  lie.Mat3   // its information matrix; zero rows and columns for what was not measured
	Mount lie.SE3    // of the sensor, in base_link
	Spot  [3]float64 // what is seen, in the base_link of the other robot; zero for a mark
}

// Sighting is the sighting of a mark, from a keyframe or, ByStamp, at a moment between two keyframes. It stays with the agent: the base
// learns from it by the summary.
type Sighting struct {
	Session uint32
	ID      int64 // of the keyframe, when ByStamp is false
	ByStamp bool
	StampNS int64 // when ByStamp is true
	Mark    string
	Sight
}

func (Sighting) event() {}

var wireSenses = [...]msgs.Sense{
	posegraph.RangeBearing: msgs.RangeBearing, posegraph.Range: msgs.Range, posegraph.Bearing: msgs.Bearing, posegraph.Position: msgs.Position,
}

// checked returns the sight without what its sense does not measure, its bearing within half a turn; or what is wrong with it.
func (s Sight) checked(dim int) (Sight, error) {
	if s.Sense < posegraph.RangeBearing || s.Sense > posegraph.Position {
		return s, fmt.Errorf("sight of sense %d, expected position, range and bearing, range or bearing", s.Sense)
	}
	has := s.Sense.Measures(3 * (dim - 1))
	some := false
	for i := range 3 {
		for j := range 3 {
			if !has[i] || !has[j] {
				s.Info[3*i+j] = 0
			}
		}
		if !has[i] {
			s.Value[i] = 0
		}
		some = some || s.Info[4*i] > 0
		if !(math.Abs(s.Value[i]) <= farthest && math.Abs(s.Spot[i]) <= farthest) {
			return s, fmt.Errorf("sight with %g of a spot at %g, expected numbers of at most %g", s.Value[i], s.Spot[i], float64(farthest))
		}
	}
	if err := checkInformation(s.Info[:], 3, has[:]); err != nil {
		return s, err
	}
	if !some {
		return s, fmt.Errorf("sight in which nothing is measured, expected an information above zero")
	}
	if s.Sense != posegraph.Position {
		switch {
		case s.Value[0] < 0:
			return s, fmt.Errorf("range %g m, expected at least 0", s.Value[0])
		case math.Abs(s.Value[1]) > 2*math.Pi || math.Abs(s.Value[2]) > math.Pi/2:
			return s, fmt.Errorf("bearing %g and elevation %g, expected at most a turn and a quarter of one", s.Value[1], s.Value[2])
		}
		s.Value[1] = math.Remainder(s.Value[1], 2*math.Pi)
	}
	if err := checkPose(&s.Mount, 3); err != nil { // a sensor may be tilted in the plane too
		return s, fmt.Errorf("mounting: %w", err)
	}
	return s, nil
}

// wire writes the sight for the wire.
func (s *Sight) wire() *msgs.Sight {
	return &msgs.Sight{Sense: wireSenses[s.Sense], Value: s.Value, Info: s.Info, Mount: wirePose(&s.Mount, 3), Spot: s.Spot}
}

// sighting takes the sighting of a mark.
func (a *Agent) sighting(nowNS int64, e *Sighting) error {
	fault := func(err error) error {
		return fmt.Errorf("sighting of mark %q in session %d: %w", e.Mark, e.Session, err)
	}
	s := a.session(e.Session)
	if s == nil {
		return fault(errors.New("the session has no keyframe"))
	}
	if err := checkMark(e.Mark); err != nil {
		return fault(err)
	}
	sight, err := e.Sight.checked(a.cfg.Dim)
	if err != nil {
		return fault(err)
	}
	if err := s.addSighting(e, &sight); err != nil {
		return fault(err)
	}
	a.lastNS = nowNS
	a.rawNow += RawSightingBytes
	return nil
}

// checkMark refuses a name that no message can hold.
func checkMark(name string) error {
	ok := name != "" && len(name) <= msgs.MaxID
	for i := 0; ok && i < len(name); i++ {
		ok = name[i] > ' ' && name[i] < 0x7f
	}
	if !ok {
		return fmt.Errorf("the name of a mark has 1 to %d visible ASCII characters", msgs.MaxID)
	}
	return nil
}
