package scenarios

import (
	"math"
	"math/rand/v2"

	"selvage/internal/lie"
	"selvage/internal/survey"
)

// The mountings of a simulated robot: what it sees with, and what others see on it.
const (
	headMount   = "head"
	beaconMount = "beacon"
)

// mountings returns them, at one height in the plane.
func mountings(dimension int) []survey.Mount {
	head := survey.Mount{Name: headMount, Kind: "sensor", X: 0.2, QW: 1}
	beacon := survey.Mount{Name: beaconMount, Kind: "target", X: -0.1, QW: 1}
	if dimension == 3 {
		head.Z, beacon.Z = 0.5, 0.6
	}
	return []survey.Mount{head, beacon}
}

// spotOf returns where in the datum the beacon of a robot at x is.
func spotOf(x *lie.SE3, dimension int) [3]float64 {
	m := mountings(dimension)[1]
	return x.Apply(m.Pose().T)
}

// see draws what the head of a robot at x measures of a point in the datum.
func see(rng *rand.Rand, x *lie.SE3, point [3]float64, kind survey.Kind, sigma SightSigmas, dimension int) survey.Sight {
	head := mountings(dimension)[0]
	p := x.Inv().Apply(point)
	for i, o := range head.Pose().T { // the head is not turned
		p[i] -= o
	}
	flat := math.Hypot(p[0], p[1])
	polar := [3]float64{math.Hypot(flat, p[2]), math.Atan2(p[1], p[0]), math.Atan2(p[2], flat)}
	out := survey.Sight{Sensor: headMount, Sigma: survey.Unmeasured}
	measure := func(c int, value, sigma float64) {
		if c == 2 && dimension == 2 {
			return
		}
		out.Value[c], out.Sigma[c] = value+sigma*rng.NormFloat64(), sigma
	}
	switch kind {
	case survey.Position:
		for c := range p {
			measure(c, p[c], sigma.Range)
		}
	case survey.RangeBearing:
		measure(0, polar[0], sigma.Range)
		measure(1, polar[1], sigma.Angle)
		measure(2, polar[2], sigma.Angle)
	case survey.Range:
		measure(0, polar[0], sigma.Range)
	case survey.Bearing:
		measure(1, polar[1], sigma.Angle)
		measure(2, polar[2], sigma.Angle)
	}
	if kind != survey.Position {
		out.Value[0] = math.Abs(out.Value[0])
		out.Value[1] = math.Remainder(out.Value[1], 2*math.Pi)
		out.Value[2] = min(max(out.Value[2], -math.Pi/2), math.Pi/2)
	}
	return out
}

// sightKinds are the words of a scenario for what is measured of a point.
var sightKinds = map[string]survey.Kind{
	"position": survey.Position, "range_bearing": survey.RangeBearing, "range": survey.Range, "bearing": survey.Bearing,
}
