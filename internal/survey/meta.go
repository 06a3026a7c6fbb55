package survey

import (
	"fmt"
	"math"
	"strings"
)

// Meta is the content of survey.yaml.
type Meta struct {
	Format    int         `yaml:"format"` // 1
	Name      string      `yaml:"name"`
	Dimension int         `yaml:"dimension"` // 2 or 3
	Datum     Datum       `yaml:"datum"`
	Robots    []RobotMeta `yaml:"robots"`
	Notes     string      `yaml:"notes,omitempty"`
}

// Datum describes the common frame of the survey.
type Datum struct {
	Name  string `yaml:"name"`
	Level bool   `yaml:"level"`          // its z axis points up along the plumb line
	Grid  *Grid  `yaml:"grid,omitempty"` // where it lies in a site or national grid, if known
}

// Grid is the pose of a level datum in a grid with x east, y north and z up:
// the coordinates of the datum's origin and the turn of its x axis from east
// towards north.
type Grid struct {
	Name   string  `yaml:"name"`
	X      float64 `yaml:"x_m"`
	Y      float64 `yaml:"y_m"`
	Z      float64 `yaml:"z_m"`
	YawRad float64 `yaml:"yaw_rad"`
}

// RobotMeta declares one robot.
type RobotMeta struct {
	ID             string   `yaml:"id"`
	Sessions       []uint32 `yaml:"sessions,flow"`
	GravityAligned bool     `yaml:"gravity_aligned"`             // the z axes of its session frames point up
	GravitySigma   float64  `yaml:"gravity_sigma_rad,omitempty"` // within this; 0 is DefaultGravitySigma
	Mounting       []Mount  `yaml:"mounting,omitempty"`
}

// DefaultGravitySigma is how well a robot is taken to know the vertical that says no more than that it does, radians: half a degree and a
// little, as of an accelerometer that is not calibrated (common practice).
const DefaultGravitySigma = 0.01

// Vertical returns the standard deviation of the direction of the z axes of the robot's session frames from the vertical, radians; 0 when
// they are not aligned with it.
func (r *RobotMeta) Vertical() float64 {
	switch {
	case !r.GravityAligned:
		return 0
	case r.GravitySigma > 0:
		return r.GravitySigma
	}
	return DefaultGravitySigma
}

// Mount is the pose in base_link of a sensor, or of what other robots see on
// this one.
type Mount struct {
	Name string  `yaml:"name"`
	Kind string  `yaml:"kind"` // sensor or target
	X    float64 `yaml:"x_m"`
	Y    float64 `yaml:"y_m"`
	Z    float64 `yaml:"z_m"`
	QX   float64 `yaml:"qx"`
	QY   float64 `yaml:"qy"`
	QZ   float64 `yaml:"qz"`
	QW   float64 `yaml:"qw"`
}

// Pose returns the pose of the mount in base_link.
func (m Mount) Pose() Pose {
	return Pose{T: [3]float64{m.X, m.Y, m.Z}, Q: [4]float64{m.QX, m.QY, m.QZ, m.QW}}
}

// formatVersion is the version of the survey folder that this package reads and
// writes.
const formatVersion = 1

// check reports every rule that m breaks, by the path of the value within the
// file.
func (m *Meta) check(report func(path, found, expected string)) {
	number := func(path string, v, most float64) {
		if !(math.Abs(v) <= most) {
			report(path, fmt.Sprint(v), fmt.Sprintf("a number of at most %g either way", most))
		}
	}
	name := func(path, s string) {
		if s == "" || !validText(s) {
			report(path, quote(s), textRule+", not empty")
		}
	}
	if m.Format != formatVersion {
		report("format", fmt.Sprint(m.Format), fmt.Sprint(formatVersion))
	}
	name("name", m.Name)
	if m.Dimension != 2 && m.Dimension != 3 {
		report("dimension", fmt.Sprint(m.Dimension), "2 or 3")
	}
	name("datum.name", m.Datum.Name)
	if g := m.Datum.Grid; g != nil {
		name("datum.grid.name", g.Name)
		number("datum.grid.x_m", g.X, maxMetres)
		number("datum.grid.y_m", g.Y, maxMetres)
		number("datum.grid.z_m", g.Z, maxMetres)
		number("datum.grid.yaw_rad", g.YawRad, 2*math.Pi)
		if !m.Datum.Level {
			report("datum.grid", "a grid for a datum that is not level", "level: true, or no grid")
		}
	}
	if len(m.Notes) > maxNotes || !printable(m.Notes, true) {
		report("notes", fmt.Sprintf("%d bytes", len(m.Notes)), fmt.Sprintf("printable text of at most %d bytes", maxNotes))
	}
	if n := len(m.Robots); n == 0 || n > maxRobots {
		report("robots", fmt.Sprintf("%d robots", n), fmt.Sprintf("1 to %d", maxRobots))
		return
	}
	seen := make(map[string]string)
	for i := range m.Robots {
		r := &m.Robots[i]
		path := fmt.Sprintf("robots[%d]", i)
		folded := strings.ToLower(r.ID)
		other, taken := seen[folded]
		switch {
		case !validRobot(r.ID):
			report(path+".id", quote(r.ID), robotRule)
		case taken:
			report(path+".id", quote(r.ID)+" besides "+quote(other), "each id once, whatever the case of its letters")
		}
		seen[folded] = r.ID
		r.check(path, name, number, report)
	}
}

func (r *RobotMeta) check(path string, name func(path, s string), number func(path string, v, most float64), report func(path, found, expected string)) {
	if n := len(r.Sessions); n == 0 || n > maxSessions {
		report(path+".sessions", fmt.Sprintf("%d sessions", n), fmt.Sprintf("1 to %d", maxSessions))
	}
	if s := r.GravitySigma; !(s >= 0 && s <= math.Pi) || s > 0 && !r.GravityAligned {
		report(path+".gravity_sigma_rad", fmt.Sprint(s), "above 0, at most half a turn, of a robot that is gravity_aligned")
	}
	sessions := make(map[uint32]bool)
	for j, s := range r.Sessions {
		if sessions[s] {
			report(fmt.Sprintf("%s.sessions[%d]", path, j), fmt.Sprintf("%d a second time", s), "each session once")
		}
		sessions[s] = true
	}
	if n := len(r.Mounting); n > maxMounts {
		report(path+".mounting", fmt.Sprintf("%d entries", n), fmt.Sprintf("at most %d", maxMounts))
		return
	}
	mounts := make(map[string]bool)
	for j, m := range r.Mounting {
		at := fmt.Sprintf("%s.mounting[%d]", path, j)
		name(at+".name", m.Name)
		if mounts[m.Name] {
			report(at+".name", quote(m.Name)+" a second time", "each name once on a robot")
		}
		mounts[m.Name] = true
		if m.Kind != "sensor" && m.Kind != "target" {
			report(at+".kind", quote(m.Kind), "sensor or target")
		}
		number(at+".x_m", m.X, maxMetres)
		number(at+".y_m", m.Y, maxMetres)
		number(at+".z_m", m.Z, maxMetres)
		if norm := quatNorm(m.Pose().Q); !(math.Abs(norm-1) <= quatTol) {
			report(at+".qw", fmt.Sprintf("a quaternion of norm %.9g", norm), fmt.Sprintf("1 within %g", quatTol))
		}
	}
}
