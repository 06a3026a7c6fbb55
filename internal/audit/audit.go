package audit

import (
	"context"
	"errors"
	"fmt"

	"selvage/internal/report"
	"selvage/internal/survey"
)

// Input is what [Run] needs.
type Input struct {
	Survey   *survey.Survey
	Verdicts []survey.ResultVerdict // on the ties of the survey, at most one each; a tie without one is open or, where it is less than a pose, held if it fits
	Decided  string                 // who decided on the ties, as it is to be printed: "the coordinator, as results/verdicts.csv has it"
	Place    bool                   // control points take no part in the adjustment: the map is placed on them afterwards, as a whole
	History  []survey.ResultChange  // every verdict that a tie ever had, in the order of time; may be nil
	Progress func(phase string)     // is told what begins; may be nil
}

// Audit is the result. It is written as audit.json; figures that do not exist are left out.
type Audit struct {
	Survey    string `json:"survey"`
	Datum     string `json:"datum"`
	Dimension int    `json:"dimension"`
	Robots    int    `json:"robots"`
	Sessions  int    `json:"sessions"`
	Keyframes int    `json:"keyframes"`
	Decided   string `json:"verdicts_by"`

	Adjustment Adjustment  `json:"adjustment"`
	Islands    []Island    `json:"islands"`
	Ties       []Tie       `json:"ties"`
	Removal    []string    `json:"ties_to_remove"`           // held ties that data snooping strikes out, in that order
	Controls   []string    `json:"control_points_to_remove"` // likewise
	Bridges    []string    `json:"bridges"`                  // held ties whose loss would part the fleet
	Places     []Place     `json:"single_places"`            // whose loss would part the fleet
	Sets       []Set       `json:"sets_not_told_apart"`      // of measurements
	Near       []Near      `json:"sets_hardly_told_apart"`   // of ties
	Loops      []Loop      `json:"loops"`                    // independent ones
	Marks      []Mark      `json:"marks"`                    // that tie robots to each other or to the datum
	LeftOut    []LeftOut   `json:"sightings_left_out"`       // of marks, by robot
	Spread     []Spread    `json:"real_spread"`              // per robot and class of measurement
	Arrived    bool        `json:"real_spread_converged"`    // of the iteration that estimates it
	Next       []Candidate `json:"next"`                     // where a further tie would help most, best first
	Basin      string      `json:"starting_basin"`           // certified or not decided
	BasinTest  BasinTest   `json:"starting_basin_test"`
	Positions  *Positions  `json:"positions,omitempty"` // of marks whose places were surveyed
	History    []Turned    `json:"verdicts_that_changed,omitempty"`

	plan     report.Plan
	unclosed bool // no loops were closed: ties that are no whole pose stand in the way
	compared bool // the tests of all ties were compared with each other
	unsplit  bool // not all sessions of all marks were tested
	sighted  bool // there are sightings of marks or ties that are less than a pose
	hidden   bool // the plan does not show all ties
	main     int  // the island that the plan is in
}

// Adjustment says how the one-piece adjustment of the held ties went. T is r' Omega r of all its measurements.
type Adjustment struct {
	Stop       string  `json:"stop"`
	Iterations int     `json:"iterations"`
	T          float64 `json:"statistic"`
	DoF        int     `json:"dof"`
	P          float64 `json:"p"`
}

// Converged reports whether the figures are those of an optimum.
func (a *Adjustment) Converged() bool { return a.Stop == "converged" || a.Stop == "nothing_to_adjust" }

// Keyframe names a keyframe.
type Keyframe struct {
	Robot   string `json:"robot"`
	Session uint32 `json:"session"`
	Key     int64  `json:"key"` // of one made at a moment between two others: minus its stamp
}

func (k Keyframe) String() string { return fmt.Sprintf("%s %d", k.Robot, k.Key) }

// Island is a set of sessions that held ties and marks join.
type Island struct {
	Sessions []string  `json:"sessions"`
	Gauge    *Keyframe `json:"gauge,omitempty"`          // held fixed: shifts and covariances are relative to it
	Controls []string  `json:"control_points,omitempty"` // that hold it instead
}

// Status is what an audit says of a tie.
type Status string

// The statuses of a tie: of held ones, whether their test was passed, and of the others, whether they fit the map.
const (
	Passed      Status = "passed"      // held, and its test found nothing
	Failed      Status = "failed"      // held, and its test found an error
	Unchecked   Status = "unchecked"   // held, and nothing would contradict it
	Fits        Status = "fits"        // not held, and agrees with the map
	Contradicts Status = "contradicts" // not held, and contradicts the map
	Untested    Status = "untested"    // not held, and no map to test it with
)

// Tie is the audit of one tie. Residual, its normalised form and the detectable errors are by component. Those of a pose are x, y, z,
// rx, ry, rz in space and x, y, rz in the plane, metres and radians along the axes of the far end; those of what is less than a pose
// are what its kind measures, a position along the axes of the sensor.
type Tie struct {
	ID      string   `json:"id"`
	Kind    string   `json:"kind"`
	Parts   []string `json:"components"`
	From    Keyframe `json:"from"`
	To      Keyframe `json:"to"`
	Verdict string   `json:"verdict"`
	Reason  string   `json:"reason"`
	Status  Status   `json:"status"`

	Residual    []float64 `json:"residual,omitempty"`
	ResidualM   *float64  `json:"residual_m,omitempty"`
	ResidualRad *float64  `json:"residual_rad,omitempty"`
	W           []Figure  `json:"normalised_residual,omitempty"` // sigmas
	T           *float64  `json:"statistic,omitempty"`
	AtLeast     bool      `json:"statistic_at_least,omitempty"` // the statistic is no less than that
	DoF         int       `json:"dof"`
	P           *float64  `json:"p,omitempty"`
	Bound       *float64  `json:"bound,omitempty"` // that the statistic was held against

	Redundancy            *float64 `json:"redundancy,omitempty"` // mean over the measured components, 0 to 1
	RedundancyTranslation *float64 `json:"redundancy_translation,omitempty"`
	RedundancyRotation    *float64 `json:"redundancy_rotation,omitempty"`

	Detectable    []Figure `json:"detectable,omitempty"`      // smallest error that its test finds
	DetectableM   *float64 `json:"detectable_m,omitempty"`    // largest of them
	DetectableRad *float64 `json:"detectable_rad,omitempty"`  //
	Shift         *Shift   `json:"shift,omitempty"`           // what an error of that size does to the map
	ApartM        *float64 `json:"leave_one_out_m,omitempty"` // how far it lies from what all else predicts
	ApartRad      *float64 `json:"leave_one_out_rad,omitempty"`

	Bridge bool `json:"bridge"`        // its loss would part the fleet
	Place  bool `json:"single_place"`  // the ties of its place are all that joins two parts of the fleet
	Set    int  `json:"set,omitempty"` // from 1: index into the sets that no test can tell apart

	held      bool    // and in the adjustment
	free      bool    // less than a pose, and to be held if it fits
	placed    bool    // not held, and both ends lie in one island
	i, j      int32   // the ends, as variables, -1 where there is none
	apart     float64 // distance of the ends, m
	m         measurement
	effect    float64 // largest reliability.Figures.Effect
	component int     // of which it is
}

// Figure is a number that may be missing: NaN, null in JSON.
type Figure float64

// Shift is how far an undetected error of a tie moves the map.
type Shift struct {
	M         float64   `json:"m"`
	Exact     bool      `json:"exact"`               // else M is a bound that the shift does not exceed
	Component string    `json:"component,omitempty"` // of the tie
	At        *Keyframe `json:"at,omitempty"`        // that moves most
	Gauge     *Keyframe `json:"gauge,omitempty"`     // that does not move; missing where control points hold the island
}

// Place is a place whose ties are all that joins two parts of the fleet.
type Place struct {
	Ties  []string `json:"ties"`
	Parts []string `json:"parts"` // sessions that would be lost to the rest
}

// Set is a set of measurements that no test can tell apart: an error in one shows equally in all.
type Set struct {
	Ties      []string `json:"ties"`
	Odometry  int      `json:"odometry_steps"`
	Closures  int      `json:"closures"`
	Sightings int      `json:"sightings"` // of marks
}

// Loop is an independent loop: a tie against the way that the ties of a spanning tree and the robots' own maps make.
type Loop struct {
	Tie string   `json:"closed_by"`
	Way []string `json:"way"` // ties of the tree
	M   float64  `json:"misclosure_m"`
	Rad float64  `json:"misclosure_rad"`
	T   float64  `json:"statistic"`
	DoF int      `json:"dof"`
	P   float64  `json:"p"`
	// Root mean square of the misclosure over its components, in sigmas.
	Sigmas float64 `json:"misclosure_sigmas"`
}

// Spread says how the errors of a class of measurements compare with their stated sigmas.
type Spread struct {
	Robot        string   `json:"robot"`
	Class        string   `json:"class"` // odometry, closure, tie, partial tie, sighting
	Measurements int      `json:"measurements"`
	Redundancy   float64  `json:"redundancy"`
	Ratio        *float64 `json:"ratio,omitempty"` // real sigma over stated sigma
	Low          *float64 `json:"low,omitempty"`   // holds with 95 %, as does High
	High         *float64 `json:"high,omitempty"`
	Words        string   `json:"words"`
}

// Candidate is a tie that is not there: two places that tracks pass within reach of each other.
type Candidate struct {
	A         Keyframe `json:"a"`
	B         Keyframe `json:"b"`
	ApartM    float64  `json:"apart_m"`
	Helps     string   `json:"helps"`                // the tie that it serves best
	BeforeM   *float64 `json:"before_m,omitempty"`   // that tie's detectable error; missing: nothing checked it
	AfterM    float64  `json:"after_m"`              // with the candidate measured
	LargestM  float64  `json:"largest_m"`            // detectable error of any checked tie then
	Unchecked int      `json:"unchecked_ties_after"` // that remain
}

// ErrNoControl says that the map was to be placed on control points, and none was seen.
var ErrNoControl = errors.New("no control point was seen")

// ErrUndetermined says that the measurements leave a keyframe free.
var ErrUndetermined = errors.New("the measurements leave a keyframe free")

// Run audits a survey.
func Run(ctx context.Context, in Input) (*Audit, error) {
	w := &work{ctx: ctx, in: &in, s: in.Survey}
	for _, phase := range []struct {
		name string
		do   func() error
	}{
		{"building the pose graph", w.build},
		{"adjusting in one piece", w.adjust},
		{"comparing with marks of known place", w.positions},
		{"certifying the starting basin", w.basin},
		{"searching bridges and places", w.search},
		{"testing every tie", w.test},
		{"testing the marks", w.testMarks},
		{"following undetected errors through the map", w.effects},
		{"closing loops", w.loops},
		{"removing what stands out", w.snoop},
		{"comparing the sigmas with what was met", w.spreads},
		{"looking for the next tie", w.next},
		{"drawing the plan", w.draw},
	} {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		if in.Progress != nil {
			in.Progress(phase.name)
		}
		if err := phase.do(); err != nil {
			return nil, err
		}
	}
	w.out.History = turned(in.History)
	return &w.out, nil
}
