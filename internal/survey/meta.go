package survey

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
	GravityAligned bool     `yaml:"gravity_aligned"` // the z axes of its session frames point up
	Mounting       []Mount  `yaml:"mounting,omitempty"`
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
