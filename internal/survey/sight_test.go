package survey

import (
	"math"
	"testing"
	"time"

	"gonum.org/v1/gonum/mat"
)

func init() {
	good["sights.good"] = sightsSurvey
	good["sights-plane.good"] = sightsInThePlane
}

// sightsSurvey is the survey in testdata/sights.good.
func sightsSurvey() *Survey {
	minute := func(m, ms int) time.Time { return time.Date(2026, 3, 31, 14, m, 0, 1e6*ms, time.UTC) }
	camera := Mount{Name: "camera", Kind: "sensor", X: 0.25, Z: 0.5, QZ: 1}
	prism := Mount{Name: "prism", Kind: "target", Z: 0.75, QW: 1}
	key := func(id int64, stamp int64) Keyframe {
		return Keyframe{Session: 1, ID: id, StampNS: stamp, HasStamp: true, Pose: Identity()}
	}
	r1 := func(id string) Tie {
		return Tie{ID: id, FromRobot: "r1", FromSession: 1, FromKey: 1, ToRobot: "r2", ToSession: 1, ToKey: 5}
	}
	pose, position, rb, distance, direction := r1("pose"), r1("position"), r1("range_bearing"), r1("range"), r1("bearing")
	pose.Pose, pose.Cov = Identity(), Uncorrelated(0.1, 0.02)
	pose.Cov.Corr[1], pose.Cov.Corr[14] = 0.25, 0.5
	position.Kind, position.Sight = Position, Sight{Sensor: "camera", Target: "prism", Value: [3]float64{1, -2, 0.5}, Sigma: [3]float64{0.1, 0.2, inf}, Corr: [3]float64{0.5, 0, 0}}
	rb.Kind, rb.Sight = RangeBearing, Sight{Sensor: "camera", Value: [3]float64{4, -0.5, 0.125}, Sigma: [3]float64{0.1, 0.02, 0.03}}
	rb.FromKey, rb.FromStampNS, rb.FromByStamp, rb.ToKey, rb.ToStampNS, rb.ToByStamp = 0, 15, true, 0, 16, true
	rb.Source, rb.StampNS, rb.HasStamp = "tag", 17, true
	distance.Kind, distance.Sight = Range, Sight{Target: "prism", Value: [3]float64{4}, Sigma: [3]float64{0.1, inf, inf}}
	direction.Kind, direction.Sight = Bearing, Sight{Target: "prism", Value: [3]float64{0, 1.5, 0}, Sigma: [3]float64{inf, 0.02, inf}}
	return &Survey{
		Meta: Meta{Format: 1, Name: "hall with marks", Dimension: 3, Datum: Datum{Name: "hall"}, Robots: []RobotMeta{
			{ID: "r1", Sessions: []uint32{1}, Mounting: []Mount{camera}},
			{ID: "r2", Sessions: []uint32{1, 2}, GravityAligned: true, Mounting: []Mount{prism}},
		}},
		Robots: []Robot{
			{ID: "r1", Keyframes: []Keyframe{key(1, 10), key(2, 20)}, Sightings: []Sighting{
				{Session: 1, Key: 1, Mark: "nail.7", Kind: Position, Sight: Sight{Value: [3]float64{3, 1, -0.25}, Sigma: [3]float64{0.1, 0.1, 0.2}, Corr: [3]float64{0, 0.5, -0.5}}},
				{Session: 1, StampNS: 15, ByStamp: true, Mark: "p1", Kind: RangeBearing, Sight: Sight{Sensor: "camera", Value: [3]float64{5, 0.5, -0.5}, Sigma: [3]float64{0.1, 0.02, 0.03}}},
				{Session: 1, Key: 2, Mark: "p1", Kind: Range, Sight: Sight{Value: [3]float64{5}, Sigma: [3]float64{0.1, inf, inf}}},
				{Session: 1, Key: 2, Mark: "c1", Kind: Bearing, Sight: Sight{Value: [3]float64{0, -1, 0.25}, Sigma: [3]float64{inf, 0.02, 0.03}}},
			}},
			{ID: "r2", Keyframes: []Keyframe{key(5, 16)}},
		},
		Marks: []Mark{
			{Name: "nail.7"},
			{Name: "p1", Role: ControlPoint, T: [3]float64{10, 20, 0.5}, Sigma: [3]float64{0.005, 0.005, inf}},
			{Name: "c1", Role: CheckPoint, T: [3]float64{-10, 20, 0.5}, Sigma: [3]float64{0.005, 0.005, 0.01}},
		},
		Ties: []Tie{pose, position, rb, distance, direction},
		Rulings: []Ruling{
			{Target: OnTie, Name: "pose", Verdict: RuledRefused, By: "lead", Note: `seen through glass, "twice"`, Time: minute(5, 0)},
			{Target: OnRobot, Name: "r2", Verdict: RuledHeld, By: "lead", Note: "checked by tape", Time: minute(5, 500)},
			{Target: OnSession, Name: "r2", Session: 2, Verdict: RuledRefused, By: "second", Note: "wheel slip", Time: minute(5, 1000)},
			{Target: OnTie, Name: "pose", Verdict: RuledFree, By: "lead", Note: "glass was open", Time: minute(7, 0)},
		},
		// What a person forgets about mountings is told once, not row by row.
		Warnings: []string{
			"robot r1 has a sensor, but robots/r1/sightings.csv names none in some rows: they are taken as of base_link",
			"robot r2 has a target, but ties.csv names none in some rows: they are taken as of base_link",
			"robot r1 has a sensor, but ties.csv names none in some rows: they are taken as of base_link",
		},
	}
}

// sightsInThePlane is the survey in testdata/sights-plane.good.
func sightsInThePlane() *Survey {
	see := func(mark string, k Kind, value, sigma [3]float64) Sighting {
		return Sighting{Key: 1, Mark: mark, Kind: k, Sight: Sight{Value: value, Sigma: sigma}}
	}
	return &Survey{
		Meta: Meta{Format: 1, Name: "floor", Dimension: 2, Datum: Datum{Name: "floor"}, Robots: []RobotMeta{{ID: "a", Sessions: []uint32{0}}, {ID: "b", Sessions: []uint32{0}}}},
		Robots: []Robot{
			{ID: "a", Keyframes: []Keyframe{{ID: 1, Pose: Identity()}}, Sightings: []Sighting{
				see("m1", RangeBearing, [3]float64{2, -3, 0}, [3]float64{0.1, 0.05, inf}),
				see("m2", Bearing, [3]float64{0, -3, 0}, [3]float64{inf, 0.05, inf}),
			}},
			{ID: "b", Keyframes: []Keyframe{{ID: 1, Pose: Identity()}}},
		},
		Marks: []Mark{{Name: "m1", Role: CheckPoint, T: [3]float64{1, 2, 0}, Sigma: [3]float64{0.1, 0.1, inf}}, {Name: "m2"}},
		Ties: []Tie{{ID: "t", FromRobot: "a", FromKey: 1, ToRobot: "b", ToKey: 1, Kind: Position,
			Sight: Sight{Value: [3]float64{1, 2, 0}, Sigma: [3]float64{0.1, 0.1, inf}}}},
	}
}

var badSights = []struct {
	name, folder, file string
	change             func(string) string
	want               string
}{
	// Ties of less than a pose
	{"range in a tie of a position", "sights.good", "ties.csv", swap("position,1,-2,0.5,,,,,0.1,0.2,inf,,,,0.5,0,,,", "position,1,-2,0.5,,,,,0.1,0.2,inf,,,,0.5,0,,3,"),
		`ties.csv:3: column range_m: found "3", expected nothing in a row of kind position`},
	{"turn in a tie of a position", "sights.good", "ties.csv", swap("position,1,-2,0.5,,,,,", "position,1,-2,0.5,,,,1,"),
		`ties.csv:3: column qw: found "1", expected nothing in a row of kind position`},
	{"sigma of a turn in a tie of a position", "sights.good", "ties.csv", swap("0.1,0.2,inf,,,,", "0.1,0.2,inf,,,1,"),
		`ties.csv:3: column srz_rad: found "1", expected nothing in a row of kind position`},
	{"correlation with a turn in a tie of a position", "sights.good", "ties.csv", swap("0.5,0,,,,,,,,camera,prism", "0.5,0,0.1,,,,,,,camera,prism"),
		`ties.csv:3: column c_ry_rz: found "0.1", expected nothing in a row of kind position`},
	{"nothing measured", "sights.good", "ties.csv", swap("0.1,0.2,inf,,,,0.5,", "inf,inf,inf,,,,0,"),
		`ties.csv:3: found a row in which nothing is measured, expected a finite sigma`},
	{"correlation without a sigma", "sights.good", "ties.csv", swap("0.1,0.2,inf,,,,0.5,0,", "0.1,0.2,inf,,,,0.5,0.1,"),
		`ties.csv:3: column c_x_z: found 0.1, expected 0 where a sigma is inf`},
	{"singular position", "sights.good", "ties.csv", swap("0.1,0.2,inf,,,,0.5,", "0.1,0.2,inf,,,,1,"),
		`ties.csv:3: column c_x_y..c_y_z: found a correlation matrix that is singular (smallest eigenvalue 0, largest 2), expected one that is positive definite`},
	{"no bearing", "sights.good", "ties.csv", swap("4,-0.5,0.125,", "4,,0.125,"),
		`ties.csv:4: column bearing_rad: found "", expected a finite decimal number`},
	{"no sigma of a bearing", "sights.good", "ties.csv", swap("0.1,0.02,0.03,", "0.1,inf,0.03,"),
		`ties.csv:4: column s_bearing_rad: found "inf", expected a number from 1e-12 to 1e+12`},
	{"no elevation in space", "sights.good", "ties.csv", swap("4,-0.5,0.125,0.1,0.02,0.03,", "4,-0.5,,0.1,0.02,,"),
		"ties.csv:4: column elevation_rad: found \"\", expected a finite decimal number\n" +
			`ties.csv:4: column s_elevation_rad: found "", expected a number from 1e-12 to 1e+12, or inf for a component that was not measured`},
	{"degrees", "sights.good", "ties.csv", swap("4,-0.5,0.125,", "4,-45,100,"),
		"ties.csv:4: column bearing_rad: found -45, expected -6.28318531 to 6.28318531 rad\n" +
			`ties.csv:4: column elevation_rad: found 100, expected -1.57079633 to 1.57079633 rad`},
	{"range zero", "sights.good", "ties.csv", swap("4,-0.5,0.125,", "0,-0.5,0.125,"),
		`ties.csv:4: column range_m: found 0, expected 1e-06 to 1e+09 m`},
	{"bearing in a tie of a range", "sights.good", "ties.csv", swap(",4,,,0.1,,", ",4,1,,0.1,,"),
		`ties.csv:5: column bearing_rad: found "1", expected nothing in a row of kind range`},
	{"from a keyframe and a moment", "sights.good", "ties.csv", swap("r1,1,,15,r2", "r1,1,1,15,r2"),
		`ties.csv:4: column from_stamp_ns: found "15" beside a from_key, expected one of the two empty`},
	{"pose at a moment", "sights.good", "ties.csv", swap("pose,r1,1,1,,r2", "pose,r1,1,,10,r2"),
		`ties.csv:2: column from_stamp_ns: found "10", expected nothing in a row of kind pose`},
	{"pose of a mounting", "sights.good", "ties.csv", swap("0.25,0.5,,,,,,,,,,\n", "0.25,0.5,,,,,,,camera,,,\n"),
		`ties.csv:2: column sensor: found "camera", expected nothing in a row of kind pose`},
	{"unknown sensor", "sights.good", "ties.csv", swap("camera,prism", "prism,prism"),
		`ties.csv:3: column sensor: found "prism", expected a sensor of robot r1 that survey.yaml lists, or nothing for its base_link`},
	{"unknown target", "sights.good", "ties.csv", swap("camera,prism", "camera,prisma"),
		`ties.csv:3: column target: found "prisma", expected a target of robot r2 that survey.yaml lists, or nothing for its base_link`},
	{"elevation in the plane", "sights-plane.good", "robots/a/sightings.csv", swap("2,-3,,0.1,0.05,", "2,-3,0.1,0.1,0.05,0.1"),
		"robots/a/sightings.csv:2: column elevation_rad: found \"0.1\", expected nothing in a survey of dimension 2\n" +
			`robots/a/sightings.csv:2: column s_elevation_rad: found "0.1", expected nothing in a survey of dimension 2`},
	{"height in the plane", "sights-plane.good", "ties.csv", swap("position,1,2,0,", "position,1,2,0.5,"),
		`ties.csv:2: column z_m: found "0.5", expected nothing in a survey of dimension 2`},
	{"column of a pose missing", "space.good", "ties.csv", swap(",qw,", ",qv,"),
		"ties.csv:2: column qw: found no such column, expected a finite decimal number\n" +
			"ties.csv:3: column qw: found no such column, expected a finite decimal number\n" +
			"ties.csv:4: column qw: found no such column, expected a finite decimal number"},

	// Sightings
	{"sighting of a pose", "sights.good", "robots/r1/sightings.csv", swap("nail.7,position", "nail.7,pose"),
		`robots/r1/sightings.csv:2: column kind: found "pose", expected position, range_bearing, range or bearing`},
	{"sighting of an unknown mark", "sights.good", "robots/r1/sightings.csv", swap("nail.7", "nail.8"),
		`robots/r1/sightings.csv:2: column mark: found "nail.8", expected a mark that marks.csv lists`},
	{"sighting from an unknown keyframe", "sights.good", "robots/r1/sightings.csv", swap("1,1,,nail.7", "1,3,,nail.7"),
		`robots/r1/sightings.csv:2: column keyframe: found 3, expected a keyframe of robot r1, session 1`},
	{"sighting from nowhere", "sights.good", "robots/r1/sightings.csv", swap("1,1,,nail.7", "1,,,nail.7"),
		`robots/r1/sightings.csv:2: column keyframe: found "", expected an integer of 64 bits`},
	{"sighting at both", "sights.good", "robots/r1/sightings.csv", swap("1,1,,nail.7", "1,1,10,nail.7"),
		`robots/r1/sightings.csv:2: column stamp_ns: found "10" beside a keyframe, expected one of the two empty`},
	{"session of nobody", "sights.good", "robots/r1/sightings.csv", swap("1,1,,nail.7", "2,1,,nail.7"),
		`robots/r1/sightings.csv:2: column session: found 2, expected a session of robot r1 that survey.yaml lists`},

	// Marks
	{"mark twice", "sights.good", "marks.csv", swap("c1,check", "p1,check"),
		"marks.csv:4: column mark: found \"p1\" a second time, expected each mark once\n" +
			`robots/r1/sightings.csv:5: column mark: found "c1", expected a mark that marks.csv lists`},
	{"role", "sights.good", "marks.csv", swap("p1,control", "p1,datum"),
		`marks.csv:3: column role: found "datum", expected mark, control or check`},
	{"control point without coordinates", "sights.good", "marks.csv", swap("10,20,0.5,0.005,0.005,inf", ",20,0.5,0.005,0.005,inf"),
		`marks.csv:3: column x_m: found "", expected a finite decimal number`},
	{"control point without sigmas", "sights.good", "marks.csv", swap("10,20,0.5,0.005,0.005,inf", "10,20,0.5,inf,inf,inf"),
		`marks.csv:3: column sx_m: found "inf", expected a finite sigma of at least one coordinate`},
	{"coordinates of a plain mark", "sights.good", "marks.csv", swap("nail.7,mark,,", "nail.7,mark,1,"),
		`marks.csv:2: column x_m: found "1", expected nothing for a mark whose role is mark`},
	{"mark without a name, not blamed on sightings", "sights.good", "marks.csv", swap("p1,control", ",control"),
		`marks.csv:3: column mark: found "", expected 1 to 128 letters, digits, _, - and dots, the first a letter or digit`},

	// Rulings
	{"target", "sights.good", "rulings.csv", swap("session,r2", "sessions,r2"),
		`rulings.csv:4: column target: found "sessions", expected tie, robot or session`},
	{"verdict", "sights.good", "rulings.csv", swap("r2,,held", "r2,,hold"),
		`rulings.csv:3: column verdict: found "hold", expected held, refused or free`},
	{"ruling on an unknown tie", "sights.good", "rulings.csv", swap("tie,pose,,free", "tie,poses,,free"),
		`rulings.csv:5: column name: found "poses", expected a tie that ties.csv lists`},
	{"ruling on an unknown robot", "sights.good", "rulings.csv", swap("robot,r2", "robot,r3"),
		`rulings.csv:3: column name: found "r3", expected a robot that survey.yaml lists`},
	{"ruling on an unknown session", "sights.good", "rulings.csv", swap("session,r2,2", "session,r2,3"),
		`rulings.csv:4: column session: found 3, expected a session of robot r2 that survey.yaml lists`},
	{"ruling on a session without one", "sights.good", "rulings.csv", swap("session,r2,2", "session,r2,"),
		`rulings.csv:4: column session: found "", expected an integer from 0 to 4294967295`},
	{"session beside a robot", "sights.good", "rulings.csv", swap("robot,r2,", "robot,r2,2"),
		`rulings.csv:3: column session: found "2", expected nothing in a ruling on a robot`},
	{"time and by", "sights.good", "rulings.csv", swap("second,wheel slip,2026-03-31T14:05:01Z", ",wheel slip,2026-03-31 14:05"),
		"rulings.csv:4: column time: found \"2026-03-31 14:05\", expected a time such as 2026-03-31T14:05:00Z (RFC 3339)\n" +
			`rulings.csv:4: column by: found "", expected one line of printable text, at most 128 bytes, no blank at either end, not empty`},
	{"note", "sights.good", "rulings.csv", swap("wheel slip", ""),
		`rulings.csv:4: column note: found "", expected one line of printable text, at most 256 bytes, not empty`},
}

func init() {
	for _, c := range badSights {
		badFolders = append(badFolders, c)
	}
}

func TestMountPose(t *testing.T) {
	m := &sightsSurvey().Meta.Robots[0]
	if p, ok := m.MountPose(""); !ok || p != Identity() {
		t.Errorf("base_link: %v, %v", p, ok)
	}
	if p, ok := m.MountPose("camera"); !ok || p != (Pose{T: [3]float64{0.25, 0, 0.5}, Q: [4]float64{0, 0, 1, 0}}) {
		t.Errorf("camera: %v, %v", p, ok)
	}
	if _, ok := m.MountPose("prism"); ok {
		t.Error("a mounting of another robot was found")
	}
}

// The information of a sight is the inverse of its covariance over what was measured.
func TestSightInformation(t *testing.T) {
	s := Sight{Sigma: [3]float64{0.1, 0.2, 0.5}, Corr: [3]float64{0.5, -0.25, 0.125}}
	cov := mat.NewSymDense(3, nil)
	corr := [3][3]float64{{1, 0.5, -0.25}, {0.5, 1, 0.125}, {-0.25, 0.125, 1}}
	for i := range 3 {
		for j := i; j < 3; j++ {
			cov.SetSym(i, j, corr[i][j]*s.Sigma[i]*s.Sigma[j])
		}
	}
	var want mat.Dense
	if err := want.Inverse(cov); err != nil {
		t.Fatal(err)
	}
	got, err := s.Information(3)
	if err != nil {
		t.Fatal(err)
	}
	for i := range 3 {
		for j := range 3 {
			if e := math.Abs(got[3*i+j] - want.At(i, j)); e > 1e-11 {
				t.Errorf("entry %d, %d is %g, want %g", i, j, got[3*i+j], want.At(i, j))
			}
		}
	}
	plane := Sight{Sigma: [3]float64{0.1, 0.5, 0.5}}
	if got, err := plane.Information(2); err != nil || got != [9]float64{1 / 0.1 / 0.1, 0, 0, 0, 4, 0, 0, 0, 0} {
		t.Errorf("in the plane %v, %v", got, err)
	}
	if _, err := (&Sight{}).Information(3); err == nil {
		t.Error("a sigma of zero passes")
	}
}
