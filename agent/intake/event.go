package intake

import (
	"fmt"
	"math"
	"strings"

	"selvage/agent"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
	"selvage/msgs"
)

// Options say of whom a front end speaks.
type Options struct {
	Robot  string             // whose front end it is
	Dim    int                // of the survey: 2 or 3
	Robots []survey.RobotMeta // whose sensors and targets may be named
	Newest uint32             // session that the agent knows, 0 for none: the next that begins has a higher number
}

// Bounds on what a front end may deliver.
const (
	maxMetres  = 1e9
	minSigma   = 1e-12
	maxSigma   = 1e12
	quatTol    = 1e-6 // on the norm of a quaternion
	minRange   = 1e-6 // m: nearer there is no direction
	symmetryTo = 1e-9 // of a covariance, relative to the sigmas
)

var components = [6]string{"x", "y", "z", "rx", "ry", "rz"}

// sigmaNames are the columns of the survey folder.
var sigmaNames = [6]string{"sx_m", "sy_m", "sz_m", "srx_rad", "sry_rad", "srz_rad"}

// decoder makes events of the lines of one front end.
type decoder struct {
	Options
	sessions *sessions
	session  *uint32 // that lines belong to which do not say
}

// event makes an event of the object; nil for a line that tells the session.
func (d *decoder) event(o *object) (e agent.Event, fault *Fault) {
	const kinds = `"session", "keyframe", "relative", "tie" or "sighting"`
	word := o.text("event", 32)
	switch word {
	case "session":
		var number uint32
		known := o.has("session")
		if known {
			number = o.session("session")
		}
		if fault := o.end("a session"); fault != nil {
			return nil, fault
		}
		number = d.sessions.begin(known, number)
		d.session = &number
		return nil, nil
	case "keyframe":
		e = agent.Keyframe{Session: d.sessionOf(o, "session"), ID: o.int64("id"), StampNS: o.int64("stamp_ns"), Pose: d.pose(o)}
	case "relative":
		r := agent.Relative{Session: d.sessionOf(o, "session"), From: o.int64("from"), To: o.int64("to"), Z: d.pose(o), Info: d.information(o)}
		switch kind := o.text("kind", 32); kind {
		case "odometry":
		case "closure":
			r.Closure = true
		default:
			o.refuse("kind", described(kind, nil), `"odometry" or "closure"`)
		}
		e = r
	case "tie":
		e = d.tie(o)
	case "sighting":
		s := agent.Sighting{Session: d.sessionOf(o, "session"), Mark: o.text("mark", msgs.MaxID)}
		s.ID, s.ByStamp, s.StampNS = keyOrStamp(o, "keyframe", "stamp_ns")
		s.Sight = d.sight(o, d.kind(o, false), d.Robot, "")
		e = s
	default:
		o.refuse("event", described(word, nil), kinds)
	}
	if fault := o.end("a " + word); fault != nil {
		return nil, fault
	}
	if k, ok := e.(agent.Keyframe); ok {
		d.sessions.begin(true, k.Session)
	}
	return e, nil
}

// sessionOf takes a session, or the one that was told before.
func (d *decoder) sessionOf(o *object, field string) uint32 {
	if !o.has(field) && d.session != nil {
		delete(o.fields, field)
		return *d.session
	}
	return o.session(field)
}

// keyOrStamp takes the id of a keyframe or a moment, of which one is there.
func keyOrStamp(o *object, key, stamp string) (id int64, byStamp bool, stampNS int64) {
	switch {
	case o.has(key) && o.has(stamp):
		o.refuse(stamp, "a moment beside "+key, "one of the two")
		return 0, false, 0
	case o.has(stamp):
		delete(o.fields, key)
		return 0, true, o.int64(stamp)
	}
	delete(o.fields, stamp)
	return o.int64(key), false, 0
}

func (d *decoder) tie(o *object) agent.Tie {
	t := agent.Tie{ID: o.optional("id", msgs.MaxID), Source: o.optional("source", msgs.MaxID)}
	t.From.Robot, t.To.Robot = d.Robot, ""
	if o.has("from_robot") {
		t.From.Robot = o.text("from_robot", msgs.MaxName)
	}
	t.To.Robot = o.text("to_robot", msgs.MaxName)
	t.From.Session, t.To.Session = d.sessionOf(o, "from_session"), o.session("to_session")
	t.From.ID, t.From.ByStamp, t.From.StampNS = keyOrStamp(o, "from_key", "from_stamp_ns")
	t.To.ID, t.To.ByStamp, t.To.StampNS = keyOrStamp(o, "to_key", "to_stamp_ns")
	if o.has("stamp_ns") {
		t.StampNS = o.int64("stamp_ns")
	}
	if kind := d.kind(o, true); kind == survey.WholePose {
		t.Z, t.Info = d.pose(o), d.information(o)
	} else {
		s := d.sight(o, kind, t.From.Robot, t.To.Robot)
		t.Sight = &s
	}
	return t
}

// kind takes what is measured.
func (d *decoder) kind(o *object, whole bool) survey.Kind {
	var words []string
	word := o.text("kind", 32)
	for k := survey.WholePose; k <= survey.Bearing; k++ {
		if k == survey.WholePose && !whole {
			continue
		}
		if k.String() == word {
			return k
		}
		words = append(words, k.String())
	}
	o.refuse("kind", described(word, nil), strings.Join(words, ", "))
	return survey.Position
}

// pose takes a pose; in the plane z_m, qx and qy may be missing.
func (d *decoder) pose(o *object) lie.SE3 {
	var p [7]float64
	for i, name := range [7]string{"x_m", "y_m", "z_m", "qx", "qy", "qz", "qw"} {
		if d.Dim == 2 && (i == 2 || i == 3 || i == 4) {
			d.nothing(o, name, 0)
			continue
		}
		bound := maxMetres
		if i > 2 {
			bound = 2
		}
		p[i] = o.number(name, -bound, bound)
	}
	q := lie.Quat(p[3:])
	if norm := math.Sqrt(q[0]*q[0] + q[1]*q[1] + q[2]*q[2] + q[3]*q[3]); !(math.Abs(norm-1) <= quatTol) {
		o.refuse("qx..qw", fmt.Sprintf("a quaternion of norm %.9g", norm), fmt.Sprintf("1 within %g", quatTol))
		return lie.Identity()
	}
	return lie.FromQuat([3]float64(p[:3]), q)
}

// nothing takes a field that has no meaning in the plane: it may be missing, null, or the value that says so.
func (d *decoder) nothing(o *object, field string, none float64) {
	if !o.has(field) {
		delete(o.fields, field)
		return
	}
	v := o.fields[field]
	if x := o.number(field, -math.MaxFloat64, math.MaxFloat64); x != none {
		o.refuse(field, described(v, nil), "nothing in a survey of dimension 2")
	}
}

// sigma takes a standard deviation: null for what was not measured.
func (d *decoder) sigma(o *object, field string) float64 {
	if v, there := o.fields[field]; there && v == nil {
		delete(o.fields, field)
		return math.Inf(1)
	}
	return o.number(field, minSigma, maxSigma)
}

// information takes the uncertainty of a pose: sigmas and correlations, or a covariance.
func (d *decoder) information(o *object) (info [36]float64) {
	var c survey.Cov
	field := "sigmas"
	if o.has("covariance") {
		field = "covariance"
		c = d.covariance(o)
	} else {
		k := 0
		for i, name := range sigmaNames {
			if d.Dim == 2 && i > 1 && i < 5 {
				c.Sigma[i] = math.Inf(1)
				d.nothing(o, name, math.Inf(1))
			} else {
				c.Sigma[i] = d.sigma(o, name)
			}
			for _, other := range components[i+1:] {
				if name := "c_" + components[i] + "_" + other; o.has(name) {
					c.Corr[k] = o.number(name, -1, 1)
				} else {
					delete(o.fields, name)
				}
				k++
			}
		}
	}
	if o.fault != nil {
		return info
	}
	info, err := c.Information(d.Dim)
	if err != nil {
		o.refuse(field, strings.TrimPrefix(err.Error(), "survey: "), "an uncertainty that is positive definite")
	}
	return info
}

// covariance takes a whole covariance matrix of x, y, z, rx, ry, rz, in the plane of x, y, rz, row by row.
func (d *decoder) covariance(o *object) (c survey.Cov) {
	at := []int{0, 1, 2, 3, 4, 5}
	if d.Dim == 2 {
		at = []int{0, 1, 5}
	}
	n := len(at)
	m := o.list("covariance", n*n)
	for i := range c.Sigma {
		c.Sigma[i] = math.Inf(1)
	}
	for i, a := range at {
		if c.Sigma[a] = math.Sqrt(m[n*i+i]); !(c.Sigma[a] >= minSigma && c.Sigma[a] <= maxSigma) {
			o.refuse("covariance", fmt.Sprintf("%g on the diagonal", m[n*i+i]), fmt.Sprintf("variances from %g to %g", minSigma*minSigma, maxSigma*maxSigma))
			return c
		}
	}
	k := 0
	for a := range 6 {
		for b := a + 1; b < 6; b++ {
			i, j := position(at, a), position(at, b)
			if i >= 0 && j >= 0 {
				scale := c.Sigma[a] * c.Sigma[b]
				if math.Abs(m[n*i+j]-m[n*j+i]) > symmetryTo*scale {
					o.refuse("covariance", fmt.Sprintf("%g and %g in row and column %d, %d", m[n*i+j], m[n*j+i], i+1, j+1), "a symmetric matrix")
				}
				c.Corr[k] = m[n*i+j] / scale
			}
			k++
		}
	}
	return c
}

func position(at []int, component int) int {
	for i, a := range at {
		if a == component {
			return i
		}
	}
	return -1
}

var senses = map[survey.Kind]posegraph.Sense{
	survey.Position: posegraph.Position, survey.RangeBearing: posegraph.RangeBearing, survey.Range: posegraph.Range, survey.Bearing: posegraph.Bearing,
}

// sight takes what a sensor of one robot tells of a target on another, or of a mark.
func (d *decoder) sight(o *object, kind survey.Kind, robot, seen string) (s agent.Sight) {
	x := survey.Sight{Sigma: survey.Unmeasured}
	if kind == survey.Position {
		for i, c := range components[:3] {
			if i == 2 && d.Dim == 2 {
				d.nothing(o, "z_m", 0)
				d.nothing(o, "sz_m", math.Inf(1))
				continue
			}
			x.Value[i], x.Sigma[i] = o.number(c+"_m", -maxMetres, maxMetres), d.sigma(o, "s"+c+"_m")
		}
		for i, name := range [3]string{"c_x_y", "c_x_z", "c_y_z"} {
			if o.has(name) {
				x.Corr[i] = o.number(name, -1, 1)
			} else {
				delete(o.fields, name)
			}
		}
	} else {
		polar := [3]struct {
			name, sigma string
			lo, hi      float64
		}{
			{"range_m", "s_range_m", minRange, maxMetres}, {"bearing_rad", "s_bearing_rad", -2 * math.Pi, 2 * math.Pi},
			{"elevation_rad", "s_elevation_rad", -math.Pi / 2, math.Pi / 2},
		}
		for i, p := range polar {
			switch {
			case i == 0 && kind == survey.Bearing, i > 0 && kind == survey.Range:
			case i == 2 && d.Dim == 2:
				d.nothing(o, p.name, 0)
				d.nothing(o, p.sigma, math.Inf(1))
			default:
				x.Value[i], x.Sigma[i] = o.number(p.name, p.lo, p.hi), d.sigma(o, p.sigma)
			}
		}
	}
	s.Sense, s.Value = senses[kind], x.Value
	s.Mount = d.mounting(o, "sensor", robot)
	if seen != "" {
		s.Spot = d.mounting(o, "target", seen).T
	}
	if o.fault != nil {
		return s
	}
	info, err := x.Information(d.Dim)
	if err != nil {
		o.refuse("sigmas", strings.TrimPrefix(err.Error(), "survey: "), "an uncertainty that is positive definite")
	}
	s.Info = info
	return s
}

// mounting takes the name of a mounting and returns its pose in base_link, which has no name.
func (d *decoder) mounting(o *object, field, robot string) lie.SE3 {
	name := o.optional(field, 64)
	if name == "" {
		return lie.Identity()
	}
	for i := range d.Robots {
		if m := &d.Robots[i]; m.ID == robot {
			if p, known := m.MountPose(name); known {
				return lie.FromQuat(p.T, p.Q)
			}
		}
	}
	o.refuse(field, described(name, nil), "a mounting of robot "+robot+" that is known, or nothing for its base_link")
	return lie.Identity()
}
