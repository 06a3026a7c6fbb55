package scenarios

import (
	"fmt"
	"math"
)

// Scenario describes a site, a fleet and what goes wrong. Default returns one that is complete; Load lays a file over it.
type Scenario struct {
	// Short name; names the survey.
	Name string `yaml:"name" form:"id"`
	// One line for people.
	Title string `yaml:"title" form:"text"`
	// Seed used when the caller gives none.
	Seed uint64 `yaml:"seed"`
	// How long the outing lasts; robots move until then.
	Duration float64 `yaml:"duration_s" unit:"s" range:"[30, 28800]"`
	// The place.
	Site SiteSpec `yaml:"site"`
	// The robots and how they move.
	Fleet FleetSpec `yaml:"fleet"`
	// What each robot measures of its own movement.
	FrontEnd FrontEndSpec `yaml:"front_end"`
	// What robots measure of each other.
	Ties TiesSpec `yaml:"ties"`
	// Marks in the site, seen by all robots that pass.
	Marks MarksSpec `yaml:"marks"`
	// Ties that are wrong.
	FalseTies FalseTiesSpec `yaml:"false_ties"`
	// The radio between the robots and the base.
	Radio RadioSpec `yaml:"radio"`
}

// SiteSpec chooses and sizes the place.
type SiteSpec struct {
	// What kind of place: drifts of a mine and tracks in a wood are surveys in space, aisles of a store are one in the plane.
	Kind string `yaml:"kind" oneof:"mine store wood"`
	// Used when kind is mine.
	Mine MineSpec `yaml:"mine"`
	// Used when kind is store.
	Store StoreSpec `yaml:"store"`
	// Used when kind is wood.
	Wood WoodSpec `yaml:"wood"`
}

// MineSpec sizes a mine: on each level parallel drifts joined by cross-cuts, the levels joined by declines.
type MineSpec struct {
	// Levels, one above the other.
	Levels int `yaml:"levels" range:"[1, 5]"`
	// Vertical distance of two levels.
	LevelSpacing float64 `yaml:"level_spacing_m" unit:"m" range:"[8, 40]"`
	// Drifts on a level; 0 lets them grow with the fleet (5 for 6 robots).
	Drifts int `yaml:"drifts" range:"[0, 60]"`
	// Distance of neighbouring drifts.
	DriftSpacing float64 `yaml:"drift_spacing_m" unit:"m" range:"[15, 100]"`
	// Cross-cuts that meet a drift; 2 or more; 0 lets them grow with the fleet (8 for 6 robots).
	CrossCuts int `yaml:"cross_cuts" range:"[0, 80]"`
	// Distance of neighbouring cross-cuts.
	CrossCutSpacing float64 `yaml:"cross_cut_spacing_m" unit:"m" range:"[15, 100]"`
	// Fall of the drifts along their length, as a tangent.
	Gradient float64 `yaml:"gradient" range:"[0, 0.1]"`
	// Width of a drift from wall to wall.
	Width float64 `yaml:"width_m" unit:"m" range:"[2, 8]"`
}

// StoreSpec sizes a store: parallel aisles between racks, in blocks, with a cross aisle at both ends of each block.
type StoreSpec struct {
	// Parallel aisles; 0 lets them grow with the fleet (30 for 6 robots).
	Aisles int `yaml:"aisles" range:"[0, 400]"`
	// Distance of the centre lines of neighbouring aisles.
	Pitch float64 `yaml:"pitch_m" unit:"m" range:"[2, 10]"`
	// Blocks of racks, one behind the other; 0 lets them grow with the fleet (2 for 6 robots).
	Blocks int `yaml:"blocks" range:"[0, 40]"`
	// Length of an aisle within one block.
	AisleLength float64 `yaml:"aisle_length_m" unit:"m" range:"[10, 100]"`
	// Clear width of an aisle, below the pitch.
	Width float64 `yaml:"width_m" unit:"m" range:"[1.2, 6]"`
}

// WoodSpec sizes a wood: tracks between random clearings over hills.
type WoodSpec struct {
	// Clearings in which tracks meet; 4 or more; 0 lets them grow with the fleet (60 for 6 robots).
	Clearings int `yaml:"clearings" range:"[0, 1200]"`
	// Typical distance of neighbouring clearings.
	Spacing float64 `yaml:"spacing_m" unit:"m" range:"[25, 150]"`
	// Height of the hills above and below the middle.
	Relief float64 `yaml:"relief_m" unit:"m" range:"[0, 40]"`
	// Width of a track.
	Width float64 `yaml:"width_m" unit:"m" range:"[1.5, 8]"`
}

// FleetSpec says how many robots go out and how they move.
type FleetSpec struct {
	// Number of robots, named r01, r02 and so on.
	Robots int `yaml:"robots" range:"[1, 60]"`
	// Robots start at random moments within this time, at most half of duration_s.
	StartSpread float64 `yaml:"start_spread_s" unit:"s" range:"[0, 7200]"`
	// Slowest walk.
	SpeedMin float64 `yaml:"speed_min_mps" unit:"m/s" range:"[0.1, 5]"`
	// Fastest walk.
	SpeedMax float64 `yaml:"speed_max_mps" unit:"m/s" range:"[0.1, 5]"`
	// Travel between keyframes.
	KeyframeSpacing float64 `yaml:"keyframe_spacing_m" unit:"m" range:"[0.25, 5]"`
	// How far from its home a robot seeks its goals, along corridors (one sigma). Larger: more robots meet.
	Reach float64 `yaml:"reach_m" unit:"m" range:"[20, 2000]"`
}

// FrontEndSpec says what a robot measures of its own movement.
type FrontEndSpec struct {
	// Error of one odometry step, sigmas; a longer or shorter step has them scaled by the root of its length.
	Odometry Sigmas `yaml:"odometry"`
	// Real spread of the odometry over the sigmas that its measurements state: at 2 the errors are twice as large as said.
	OdometrySpread float64 `yaml:"odometry_spread" range:"[0.1, 10]"`
	// Heading drift that the sigmas do not cover: each session of a robot draws its own, once, with this sigma.
	HeadingBias float64 `yaml:"heading_bias_rad_per_m" unit:"rad/m" range:"[0, 0.01]"`
	// Error of a loop closure.
	Closure Sigmas `yaml:"closure"`
	// A closure is found when the robot comes this near to an earlier keyframe of its own in the same corridor.
	ClosureRange float64 `yaml:"closure_range_m" unit:"m" range:"[0, 20]"`
	// Travel between closures.
	ClosureSpacing float64 `yaml:"closure_spacing_m" unit:"m" range:"[1, 1000]"`
	// Share of closures, of all offered, that join unrelated places.
	FalseClosures float64 `yaml:"false_closures" range:"[0, 0.9]"`
	// Time from a keyframe to the closures and recognitions found at it.
	Latency float64 `yaml:"latency_s" unit:"s" range:"[0, 60]"`
	// Moments at which a front end loses itself and begins a new session, with a frame of its own.
	Restarts []RestartSpec `yaml:"restarts" most:"200"`
}

// RestartSpec is a restart of front ends.
type RestartSpec struct {
	// The robot concerned, or all.
	Robot string `yaml:"robot" form:"id"`
	// Moment of the restart. Before the start of the robot it has no effect.
	At float64 `yaml:"at_s" unit:"s" range:"[0, 28800]"`
}

// TiesSpec says what robots measure of each other.
type TiesSpec struct {
	// Two robots measure each other when they come this near at one time, in one corridor or with a clear line between them.
	EncounterRange float64 `yaml:"encounter_range_m" unit:"m" range:"[0, 50]"`
	// Error of such a measurement.
	Encounter Sigmas `yaml:"encounter"`
	// What is measured then: the pose of the other robot, or less, of a beacon on it.
	EncounterKind string `yaml:"encounter_kind" oneof:"pose position range_bearing range bearing"`
	// Error of such a measurement when it is less than a pose.
	Sight SightSigmas `yaml:"sight"`
	// A robot recognises a place where another was earlier when it comes this near to one of its keyframes.
	RevisitRange float64 `yaml:"revisit_range_m" unit:"m" range:"[0, 20]"`
	// Error of such a measurement.
	Revisit Sigmas `yaml:"revisit"`
	// Share of the occasions that are noticed.
	Recall float64 `yaml:"recall" range:"[0, 1]"`
	// Travel between ties of one pair of robots, on the track of each.
	Spacing float64 `yaml:"spacing_m" unit:"m" range:"[1, 1000]"`
}

// MarksSpec says which marks (targets, reflectors, tags) are in the site and what robots see of them.
type MarksSpec struct {
	// How many there are.
	Count int `yaml:"count" range:"[0, 1000]"`
	// How many of them are control points, whose coordinates in the datum are known.
	Control int `yaml:"control" range:"[0, 1000]"`
	// How many of the others are check points: known too, and used for nothing but the comparison.
	Check int `yaml:"check" range:"[0, 1000]"`
	// Error of each known coordinate.
	Surveyed float64 `yaml:"surveyed_m" unit:"m" range:"[0.0001, 10]"`
	// A mark is seen from within this distance, with nothing in between.
	Range float64 `yaml:"range_m" unit:"m" range:"[0.5, 100]"`
	// Travel of a robot between two sightings of one mark.
	Spacing float64 `yaml:"spacing_m" unit:"m" range:"[0.1, 1000]"`
	// What is measured of a mark.
	Kind string `yaml:"kind" oneof:"position range_bearing range bearing"`
	// Error of a sighting.
	Sight SightSigmas `yaml:"sight"`
}

// FalseTiesSpec says how many ties are wrong, as shares of ALL ties offered. The shares must not exceed 0.9 together.
type FalseTiesSpec struct {
	// Share that joins unrelated places, each tie for itself.
	Independent float64 `yaml:"independent" range:"[0, 0.9]"`
	// Share that comes in clusters which agree with each other, as places do that look alike. Where the site has no room for
	// one more cluster, single ones take its place.
	Clustered float64 `yaml:"clustered" range:"[0, 0.9]"`
	// Share of the marks seen, and of the robots seen where that is less than a pose, that are taken for another mark or robot.
	Mistaken float64 `yaml:"mistaken" range:"[0, 0.9]"`
	// Ties in a cluster.
	ClusterSize int `yaml:"cluster_size" range:"[2, 20]"`
	// Travel between the ties of a cluster.
	ClusterSpacing float64 `yaml:"cluster_spacing_m" unit:"m" range:"[1, 100]"`
}

// RadioSpec describes the radio between the robots and the base, and among robots.
type RadioSpec struct {
	// Where the base stands in the datum, x, y, z; left out, in the middle of the site.
	Base *[3]float64 `yaml:"base_m" unit:"m" range:"[-100000, 100000]"`
	// Reach of the radio, walls ignored; 0 means everywhere.
	Range float64 `yaml:"range_m" unit:"m" range:"[0, 100000]"`
	// Share of messages lost within reach.
	Loss float64 `yaml:"loss" range:"[0, 1]"`
	// Least delay of a message.
	Delay float64 `yaml:"delay_s" unit:"s" range:"[0, 60]"`
	// Mean of the random delay on top, exponential.
	Jitter float64 `yaml:"jitter_s" unit:"s" range:"[0, 60]"`
	// Rate of each link in each direction; 0 means unlimited.
	Bandwidth float64 `yaml:"bandwidth_bytes_per_s" unit:"B/s" range:"[0, 1e9]"`
	// Longest wait for a busy link; a message that would wait longer is lost.
	Queue float64 `yaml:"queue_s" unit:"s" range:"[0, 3600]"`
	// Share of messages that arrive twice.
	Duplicates float64 `yaml:"duplicates" range:"[0, 1]"`
	// Share of messages held back so that later ones overtake them.
	Reordered float64 `yaml:"reordered" range:"[0, 1]"`
	// Longest such hold.
	ReorderHold float64 `yaml:"reorder_hold_s" unit:"s" range:"[0, 60]"`
	// Times without radio.
	Outages []OutageSpec `yaml:"outages" most:"200"`
}

// OutageSpec is a time without radio.
type OutageSpec struct {
	// The robot concerned, or all.
	Robot string `yaml:"robot" form:"id"`
	// Start of the outage.
	From float64 `yaml:"from_s" unit:"s" range:"[0, 86400]"`
	// End of the outage.
	To float64 `yaml:"to_s" unit:"s" range:"[0, 86400]"`
}

// Sigmas are standard deviations of a measured pose, the same for the three axes.
type Sigmas struct {
	// Of each coordinate of the translation.
	Translation float64 `yaml:"translation_m" unit:"m" range:"[0.0001, 10]"`
	// Of each component of the rotation.
	Rotation float64 `yaml:"rotation_rad" unit:"rad" range:"[0.00001, 1]"`
}

// SightSigmas are standard deviations of what is measured of a point.
type SightSigmas struct {
	// Of a range, and of each coordinate of a position.
	Range float64 `yaml:"range_m" unit:"m" range:"[0.0001, 10]"`
	// Of a bearing and an elevation.
	Angle float64 `yaml:"angle_rad" unit:"rad" range:"[0.00001, 1]"`
}

// Default returns the scenario that a file is laid over.
func Default() *Scenario {
	return &Scenario{
		Name:     "unnamed",
		Title:    "unnamed scenario",
		Seed:     1,
		Duration: 3600,
		Site: SiteSpec{
			Kind:  "mine",
			Mine:  MineSpec{Levels: 2, LevelSpacing: 18, DriftSpacing: 32, CrossCutSpacing: 42, Gradient: 0.012, Width: 5},
			Store: StoreSpec{Pitch: 4, AisleLength: 40, Width: 2.6},
			Wood:  WoodSpec{Spacing: 55, Relief: 12, Width: 3},
		},
		Fleet: FleetSpec{Robots: 6, StartSpread: 300, SpeedMin: 0.5, SpeedMax: 1, KeyframeSpacing: 1, Reach: 120},
		FrontEnd: FrontEndSpec{
			Odometry: Sigmas{0.02, 0.0017}, OdometrySpread: 1, HeadingBias: 0.0001,
			Closure: Sigmas{0.05, 0.005}, ClosureRange: 2, ClosureSpacing: 5, Latency: 0.5,
		},
		Ties: TiesSpec{
			EncounterRange: 10, Encounter: Sigmas{0.06, 0.008},
			RevisitRange: 3, Revisit: Sigmas{0.08, 0.009},
			Recall: 0.8, Spacing: 20, EncounterKind: "pose", Sight: SightSigmas{0.05, 0.008},
		},
		Marks:     MarksSpec{Surveyed: 0.01, Range: 8, Spacing: 4, Kind: "range_bearing", Sight: SightSigmas{0.03, 0.005}},
		FalseTies: FalseTiesSpec{Independent: 0.1, Clustered: 0.05, ClusterSize: 4, ClusterSpacing: 12},
		Radio: RadioSpec{
			Range: 250, Loss: 0.05, Delay: 0.02, Jitter: 0.03, Bandwidth: 20000, Queue: 30,
			Duplicates: 0.01, Reordered: 0.02, ReorderHold: 0.5,
		},
	}
}

// Dimension returns 2 for a survey in the plane and 3 for one in space.
func (sc *Scenario) Dimension() int {
	if sc.Site.Kind == "store" {
		return 2
	}
	return 3
}

// Validate reports everything that is wrong with the scenario as [FieldErrors].
func (sc *Scenario) Validate() error { return sc.validate(nil).orNil() }

// rules are what no single field can tell.
func (sc *Scenario) rules(report func(path, message string)) {
	if sc.Fleet.SpeedMin > sc.Fleet.SpeedMax {
		report("fleet.speed_min_mps", "is above speed_max_mps, expected at most that")
	}
	if sc.Fleet.StartSpread > sc.Duration/2 {
		report("fleet.start_spread_s", "is more than half of duration_s, expected at most that")
	}
	if n := float64(sc.Fleet.Robots) * sc.Duration * sc.Fleet.SpeedMax / sc.Fleet.KeyframeSpacing; n > maxKeyframes {
		report("fleet.keyframe_spacing_m", fmt.Sprintf("makes up to %.0f keyframes in all, expected at most %d", n, maxKeyframes))
	}
	if sc.FalseTies.Independent+sc.FalseTies.Clustered > 0.9 {
		report("false_ties.clustered", "makes more than 0.9 together with independent, expected at most that")
	}
	if m := &sc.Marks; m.Control+m.Check > m.Count {
		report("marks.check", fmt.Sprintf("makes %d known marks together with control, expected at most count, %d", m.Control+m.Check, m.Count))
	}
	if s := sc.Site.Store; sc.Site.Kind == "store" && s.Width > s.Pitch-0.4 {
		report("site.store.width_m", "leaves less than 0.4 m for the racks, expected pitch_m - 0.4 or less")
	}
	if sc.Site.Mine.CrossCuts == 1 {
		report("site.mine.cross_cuts", "found 1, expected 0 or 2 and more")
	}
	if n := sc.Site.Wood.Clearings; n > 0 && n < 4 {
		report("site.wood.clearings", fmt.Sprintf("found %d, expected 0 or 4 and more", n))
	}
	named := func(robot, path string) {
		if robot != allRobots && !sc.hasRobot(robot) {
			report(path, "names no robot of the fleet, expected r01 to "+robotID(sc.Fleet.Robots-1)+", or all")
		}
	}
	for i, r := range sc.FrontEnd.Restarts {
		named(r.Robot, index("front_end.restarts", i)+".robot")
	}
	for i, o := range sc.Radio.Outages {
		named(o.Robot, index("radio.outages", i)+".robot")
		if !(o.To > o.From) {
			report(index("radio.outages", i)+".to_s", "is not after from_s, expected a later time")
		}
	}
}

// maxKeyframes bounds the size of a world.
const maxKeyframes = 1000000

// grow returns n, or where it is 0 the size for six robots scaled to the fleet so that each robot has as much site as there.
func (sc *Scenario) grow(n, six int) int {
	if n > 0 {
		return n
	}
	return max(2, int(math.Round(float64(six)*math.Sqrt(float64(sc.Fleet.Robots)/6))))
}
