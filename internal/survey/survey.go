package survey

// Survey is the content of one survey folder. Robots stand in the order of
// Meta.Robots.
type Survey struct {
	Meta   Meta
	Robots []Robot
	Marks  []Mark
	Ties   []Tie
	Truth  []TruthPose

	// Rulings are in the order in which they were made; see [Survey.TieRulings].
	Rulings []Ruling

	// Injected are the identities that were made wrong on purpose. Read does not return them.
	Injected []Injected

	// Warnings are what Read left aside, one sentence each: columns and files
	// that this version does not know. Write ignores them.
	Warnings []string
}

// Robot holds what one robot recorded, over all its sessions.
type Robot struct {
	ID        string
	Keyframes []Keyframe
	Relatives []Relative
	Sightings []Sighting
}

// Pose is the pose of a second frame in a first: translation in metres and
// unit quaternion x, y, z, w.
type Pose struct {
	T [3]float64
	Q [4]float64
}

// Identity is the pose of a frame in itself.
func Identity() Pose { return Pose{Q: [4]float64{3: 1}} }

// Planar reports whether the pose lies in the plane: no height, no tilt.
func (p Pose) Planar() bool { return p.T[2] == 0 && p.Q[0] == 0 && p.Q[1] == 0 }

// Keyframe is a pose in the frame of its session, as the front end had it.
type Keyframe struct {
	Session  uint32
	ID       int64 // unique within the session
	StampNS  int64
	HasStamp bool
	Pose     Pose
}

// RelativeKind says where a relative pose within one session comes from.
type RelativeKind uint8

const (
	Odometry RelativeKind = iota
	Closure
)

// String returns the word that stands in the column kind.
func (k RelativeKind) String() string {
	switch k {
	case Odometry:
		return "odometry"
	case Closure:
		return "closure"
	}
	return "unknown"
}

// Relative is a measured pose of keyframe To in keyframe From of one session.
// A pair may be measured more than once.
type Relative struct {
	Session  uint32
	From, To int64
	Kind     RelativeKind
	Pose     Pose
	Cov      Cov // in the frame of To
}

// Tie is what one robot has measured of another, or of itself in another
// session: a pose of its base_link, or a sight of it.
type Tie struct {
	ID string

	// The near end, which measured: keyframe FromKey or, if FromByStamp, the
	// moment FromStampNS of the clock of FromRobot. A tie of kind WholePose has a
	// keyframe.
	FromRobot   string
	FromSession uint32
	FromKey     int64
	FromStampNS int64
	FromByStamp bool

	// The far end: keyframe ToKey or, if ToByStamp, the moment ToStampNS of
	// the clock of ToRobot.
	ToRobot   string
	ToSession uint32
	ToKey     int64
	ToStampNS int64
	ToByStamp bool

	Kind  Kind
	Pose  Pose  // of the far end in the near one, for kind WholePose
	Cov   Cov   // in the frame of the far end, for kind WholePose
	Sight Sight // for any other kind

	Source   string // the sensor or program that made it
	StampNS  int64  // when it was made
	HasStamp bool
}

// TruthPose is a true pose in a frame common to all robots, at a keyframe or,
// if ByStamp, at a moment.
type TruthPose struct {
	Robot   string
	Session uint32
	Key     int64
	StampNS int64
	ByStamp bool
	Pose    Pose
}
