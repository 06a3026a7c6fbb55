package survey

import (
	"fmt"
	"math"
	"strconv"
)

// Kind says what a tie or a sighting measures of what it sees.
type Kind uint8

// A tie of kind WholePose has a Pose and a Cov, one of any other kind a [Sight], as every [Sighting] has.
const (
	WholePose    Kind = iota // written pose
	Position                 // x, y, z in the frame of the sensor
	RangeBearing             // range and direction
	Range
	Bearing // direction alone
)

var kindNames = [...]string{"pose", "position", "range_bearing", "range", "bearing"}

// String returns the word that stands in the column kind.
func (k Kind) String() string {
	if int(k) < len(kindNames) {
		return kindNames[k]
	}
	return "unknown"
}

// Sight is a measurement of a point that is less than a pose: where, or in what direction, a sensor of one robot has seen a mark
// or a target on another robot.
type Sight struct {
	Sensor string // mounting of the robot that sees; empty: base_link
	Target string // mounting of the robot seen; empty: base_link

	// Value is x, y, z (m) in the frame of the sensor for kind Position, else range (m), bearing (rad, counter-clockwise from x
	// forward) and elevation (rad, up from the x-y plane of the sensor). What was not measured is zero.
	Value [3]float64

	// Sigma holds their standard deviations, +Inf for a component that was not measured: always the third in the plane.
	Sigma [3]float64

	// Corr are the correlations x_y, x_z, y_z of kind Position.
	Corr [3]float64
}

// Unmeasured is the sigma of a sight of which nothing was measured: fill in what was.
var Unmeasured = [3]float64{math.Inf(1), math.Inf(1), math.Inf(1)}

// cov returns the uncertainty as that of a translation.
func (s *Sight) cov() (c Cov) {
	c.Sigma = [6]float64{s.Sigma[0], s.Sigma[1], s.Sigma[2], math.Inf(1), math.Inf(1), math.Inf(1)}
	for i, k := range sightCorr {
		c.Corr[k] = s.Corr[i]
	}
	return c
}

// sightCorr are the places of x_y, x_z and y_z among the correlations of a pose.
var sightCorr = [3]int{0, 1, 5}

// Information returns the inverse of the covariance of the measured components, 3x3 row-major, with zero rows and columns for the
// others, in dimension 2 also for the third. It fails as [Cov.Information] does.
func (s *Sight) Information(dim int) (info [9]float64, err error) {
	c := s.cov()
	whole, err := c.Information(dim)
	for i := range 3 {
		copy(info[3*i:3*i+3], whole[6*i:])
	}
	return info, err
}

// The columns of a sight besides x_m, y_m, z_m and their sigmas.
var polarColumns = []column{{"range_m", true}, {"bearing_rad", true}, {"elevation_rad", true},
	{"s_range_m", true}, {"s_bearing_rad", true}, {"s_elevation_rad", true}}

// sightAt says where a table has the columns of a sight: the first of each three, and each correlation.
type sightAt struct {
	position, positionSigma, polar, polarSigma int
	corr                                       [3]int
}

// none complains about a value in column c, which has no meaning in a row of this kind.
func (t *table) none(c int, kind Kind) {
	if f := t.text(c); len(f) > 0 {
		t.faultAt(c, quote(string(f)), "nothing in a row of kind "+kind.String())
	}
}

// sight reads the values of a sight of the given kind, which is not WholePose, and complains about any that do not belong to it.
func (t *table) sight(kind Kind, at sightAt, dim int) (s Sight) {
	s.Sigma = Unmeasured
	sound := true
	for i := range 3 {
		polar := kind == RangeBearing || i == 0 && kind == Range || i > 0 && kind == Bearing
		sound = t.component(&s, i, at.position+i, at.positionSigma+i, kind == Position, kind, dim) && sound
		sound = t.component(&s, i, at.polar+i, at.polarSigma+i, polar, kind, dim) && sound
	}
	correlated := false
	for i, c := range at.corr {
		pair := [3][2]int{{0, 1}, {0, 2}, {1, 2}}[i]
		switch f := t.text(c); {
		case len(f) == 0: // absent means none
		case kind != Position:
			t.none(c, kind)
		default:
			r, ok := t.correlation(c, s.Sigma[pair[0]], s.Sigma[pair[1]])
			sound = sound && ok
			correlated = correlated || r != 0
			s.Corr[i] = r
		}
	}
	if math.IsInf(s.Sigma[0], 1) && math.IsInf(s.Sigma[1], 1) && math.IsInf(s.Sigma[2], 1) && sound {
		t.fault("", "a row in which nothing is measured", "a finite sigma")
	}
	if sound && correlated {
		c := s.cov()
		if err := c.checkCorrelation(); err != nil {
			t.fault("c_x_y..c_y_z", err.Error(), "one that is positive definite")
		}
	}
	return s
}

// component reads component i of a sight, its value from column c and its sigma from column cs, if it is one of this kind.
func (t *table) component(s *Sight, i, c, cs int, belongs bool, kind Kind, dim int) (sound bool) {
	switch {
	case !belongs:
		t.none(c, kind)
		t.none(cs, kind)
		return true
	case i == 2 && dim == 2:
		for _, c := range [2]int{c, cs} {
			if f := string(t.text(c)); f != "" && f != "0" && f != "inf" {
				t.faultAt(c, quote(f), "nothing in a survey of dimension 2")
				sound = false
			}
		}
		return true
	}
	v, ok := t.float(c)
	lo, hi, unit := -maxMetres, maxMetres, "m"
	if kind != Position {
		switch i {
		case 0:
			lo = minRange
		case 1:
			lo, hi, unit = -2*math.Pi, 2*math.Pi, "rad"
		case 2:
			lo, hi, unit = -math.Pi/2, math.Pi/2, "rad"
		}
	}
	if ok && !(lo <= v && v <= hi) {
		t.faultAt(c, strconv.FormatFloat(v, 'g', -1, 64), fmt.Sprintf("%.9g to %.9g %s", lo, hi, unit))
		ok = false
	}
	s.Value[i] = v
	sigma, sigmaOK := t.sigma(cs, kind == Position || i == 2)
	s.Sigma[i] = sigma
	return ok && sigmaOK
}

// minRange is the least range in m: nearer there is no direction.
const minRange = 1e-6
