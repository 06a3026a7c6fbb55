package survey

import "fmt"

// Role says what a mark is to the survey.
type Role uint8

// A control point carries the datum, a check point takes no part in any fit and shows how well it came out, and a plain mark has no
// known coordinates.
const (
	PlainMark Role = iota // written mark
	ControlPoint
	CheckPoint
)

var roleNames = [...]string{"mark", "control", "check"}

// String returns the word that stands in the column role.
func (r Role) String() string {
	if int(r) < len(roleNames) {
		return roleNames[r]
	}
	return "unknown"
}

// Mark is a point that robots see: a tag, a reflector, a survey nail.
type Mark struct {
	Name string
	Role Role

	// Of a control or check point: coordinates in the datum (m; z is 0 in the plane) and their sigmas, +Inf for a coordinate that is
	// not known, always z in the plane. Of a plain mark: zero.
	T     [3]float64
	Sigma [3]float64
}

// Sighting is a sight of a mark by a robot, at a keyframe or, if ByStamp, at a moment of the robot's clock. Its sight has no Target.
type Sighting struct {
	Session uint32
	Key     int64
	StampNS int64
	ByStamp bool
	Mark    string
	Kind    Kind // not WholePose
	Sight   Sight
}

const (
	markName, markRole, markPosition, markSigma = 0, 1, 2, 5

	sightingSession, sightingKey, sightingStamp, sightingMark, sightingKind, sightingSensor = 0, 1, 2, 3, 4, 5

	sightingPosition = 6
)

var (
	markColumns = []column{{name: "mark"}, {name: "role"}, {name: "x_m"}, {name: "y_m"}, {name: "z_m", optional: true},
		{name: "sx_m"}, {name: "sy_m"}, {name: "sz_m", optional: true}}

	sightingColumns = columns([]column{{name: "session"}, {name: "keyframe"}, {name: "stamp_ns", optional: true}, {name: "mark"},
		{name: "kind"}, {name: "sensor", optional: true},
		{name: "x_m", optional: true}, {name: "y_m", optional: true}, {name: "z_m", optional: true},
		{name: "sx_m", optional: true}, {name: "sy_m", optional: true}, {name: "sz_m", optional: true},
		{name: "c_x_y", optional: true}, {name: "c_x_z", optional: true}, {name: "c_y_z", optional: true}}, polarColumns)

	sightingAt = sightAt{position: sightingPosition, positionSigma: sightingPosition + 3, polar: sightingPosition + 9,
		polarSigma: sightingPosition + 12, corr: [3]int{sightingPosition + 6, sightingPosition + 7, sightingPosition + 8}}
)

func (r *reader) marks() error {
	dim := r.survey.Meta.Dimension
	r.markNames = make(map[string]bool)
	unnamed := false
	before := r.sink.Total
	whole, err := r.rows(marksName, markColumns, true, func(t *table) {
		m := Mark{Name: string(t.text(markName))}
		switch {
		case !validTie(m.Name):
			t.faultAt(markName, quote(m.Name), tieRule)
			unnamed = true
		case r.markNames[m.Name]:
			t.faultAt(markName, quote(m.Name)+" a second time", "each mark once")
		}
		r.markNames[m.Name] = true
		switch role := string(t.text(markRole)); role {
		case "mark":
		case "control":
			m.Role = ControlPoint
		case "check":
			m.Role = CheckPoint
		default:
			t.faultAt(markRole, quote(role), "mark, control or check")
			return
		}
		if m.Role == PlainMark {
			for c := markPosition; c < markSigma+3; c++ {
				if f := t.text(c); len(f) > 0 {
					t.faultAt(c, quote(string(f)), "nothing for a mark whose role is mark")
				}
			}
		} else {
			t.coordinates(&m, dim)
		}
		if !t.bad {
			r.survey.Marks = append(r.survey.Marks, m)
		}
	})
	if unnamed || !whole && r.sink.Total > before { // which there are cannot be told
		r.markNames = nil
	}
	return err
}

// coordinates reads those of a control or check point.
func (t *table) coordinates(m *Mark, dim int) {
	s := Sight{Sigma: Unmeasured}
	for i := range 3 {
		t.component(&s, i, markPosition+i, markSigma+i, true, Position, dim)
	}
	m.T, m.Sigma = s.Value, s.Sigma
	if !t.bad && s.Sigma == Unmeasured {
		t.faultAt(markSigma, quote(string(t.text(markSigma))), "a finite sigma of at least one coordinate")
	}
}

func (r *reader) sightings(robot *Robot) error {
	dim := r.survey.Meta.Dimension
	name := robotsName + "/" + robot.ID + "/" + sightingsName
	_, err := r.rows(name, sightingColumns, true, func(t *table) {
		var m Sighting
		var ok bool
		m.Kind, ok = t.kind(sightingKind, Position)
		if !ok {
			return
		}
		var e end
		e.robot = robot.ID
		e.session, e.ok = r.session(t, sightingSession, robot.ID)
		r.place(t, &e, sightingKey, sightingStamp)
		m.Session, m.Key, m.StampNS, m.ByStamp = e.session, e.key, e.stampNS, e.byStamp
		m.Mark = string(t.text(sightingMark))
		if r.markNames != nil && !r.markNames[m.Mark] {
			t.faultAt(sightingMark, quote(m.Mark), "a mark that "+marksName+" lists")
		}
		m.Sight = t.sight(m.Kind, sightingAt, dim)
		m.Sight.Sensor = r.mount(t, sightingSensor, robot.ID, "sensor")
		if !t.bad {
			robot.Sightings = append(robot.Sightings, m)
		}
	})
	return err
}

// kind reads a kind from least on.
func (t *table) kind(c int, least Kind) (Kind, bool) {
	f := string(t.text(c))
	for k := least; int(k) < len(kindNames); k++ {
		if f == kindNames[k] {
			return k, true
		}
	}
	text := ""
	for k := least; int(k) < len(kindNames); k++ {
		switch {
		case k == least:
		case int(k) == len(kindNames)-1:
			text += " or "
		default:
			text += ", "
		}
		text += kindNames[k]
	}
	t.faultAt(c, quote(f), text)
	return 0, false
}

// mount reads the name of a mounting of the robot, sensor or target, which may be empty.
func (r *reader) mount(t *table, c int, robot, kind string) string {
	name := string(t.text(c))
	for i := range r.survey.Meta.Robots {
		m := &r.survey.Meta.Robots[i]
		if m.ID != robot {
			continue
		}
		listed := false
		for k := range m.Mounting {
			listed = listed || m.Mounting[k].Kind == kind
			if m.Mounting[k].Kind == kind && m.Mounting[k].Name == name {
				return name
			}
		}
		switch {
		case name != "":
			t.faultAt(c, quote(name), fmt.Sprintf("a %s of robot %s that %s lists, or nothing for its base_link", kind, robot, metaName))
		case listed:
			r.bare(fmt.Sprintf("robot %s has a %s, but %s names none in some rows: they are taken as of base_link", robot, kind, t.name))
		}
		return name
	}
	return name // the robot has been found fault with
}

// bare notes a warning once.
func (r *reader) bare(text string) {
	if r.warned == nil {
		r.warned = make(map[string]bool)
	}
	if !r.warned[text] {
		r.warned[text] = true
		r.sink.warn("%s", text)
	}
}

// MountPose returns the pose in base_link of the mounting of that name; the empty name is base_link itself.
func (m *RobotMeta) MountPose(name string) (Pose, bool) {
	if name == "" {
		return Identity(), true
	}
	for i := range m.Mounting {
		if m.Mounting[i].Name == name {
			return m.Mounting[i].Pose(), true
		}
	}
	return Pose{}, false
}
