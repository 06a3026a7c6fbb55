package survey

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
)

// MarkUse says what becomes of the landmarks that robots have seen.
type MarkUse uint8

const (
	SharedMarks  MarkUse = iota // one mark for all robots
	PrivateMarks                // a mark of each robot, as if nobody knew that they see the same
	NoMarks
)

// SightingLogOptions say how a log becomes a survey. Start from [DefaultSightingLogOptions].
type SightingLogOptions struct {
	FromS, ToS float64 // the part of the log, s

	LagS     float64 // a command takes effect so much later, s
	EarlierS float64 // a sighting shows what was so much before its stamp, s

	// A keyframe is due after so many metres driven, radians turned or seconds, whichever comes first, and at every sighting.
	EveryM, EveryRad, EveryS float64

	Odometry     OdometryNoise
	SigmaRange   float64 // m
	SigmaBearing float64 // rad

	Robots bool    // keep sightings of robots, as ties
	Marks  MarkUse // of landmarks, as sightings of marks
	Role   Role    // of marks whose place is known

	// ThinS is the least time between two sightings of one subject by one robot that are kept, s: what comes in one burst errs alike.
	ThinS float64

	Wrong Wrong
}

// DefaultSightingLogOptions returns the settings for small indoor robots with a camera.
func DefaultSightingLogOptions() SightingLogOptions {
	return SightingLogOptions{
		ToS: math.Inf(1), LagS: 0.2, EarlierS: 0.05, EveryM: 0.5, EveryRad: 0.5, EveryS: 10,
		Odometry:   OdometryNoise{Forward: 0.07, Sideways: 0.04, Drift: 0.05, Turn: 0.15},
		SigmaRange: 0.15, SigmaBearing: 0.02, Robots: true, Role: CheckPoint,
	}
}

// check returns an error for settings that make no sense.
func (o *SightingLogOptions) check() error {
	positive := func(name string, v, most float64) error {
		const least = 1e-3
		if !(v >= least && v <= most) {
			return fmt.Errorf("survey: %s is %g, expected %g to %g", name, v, least, most)
		}
		return nil
	}
	notNegative := func(name string, v, most float64) error {
		if !(v >= 0 && v <= most) {
			return fmt.Errorf("survey: %s is %g, expected 0 to %g", name, v, most)
		}
		return nil
	}
	const seconds = 1e6
	for _, err := range []error{
		positive("sigma of a range", o.SigmaRange, maxMetres), positive("sigma of a bearing", o.SigmaBearing, math.Pi),
		positive("way between keyframes", o.EveryM, maxMetres), positive("turn between keyframes", o.EveryRad, maxMetres), positive("time between keyframes", o.EveryS, seconds),
		notNegative("lag of commands", o.LagS, seconds), notNegative("delay of sightings", o.EarlierS, seconds), notNegative("time between sightings", o.ThinS, seconds),
		notNegative("odometry noise forward", o.Odometry.Forward, maxMetres), notNegative("odometry noise sideways", o.Odometry.Sideways, maxMetres),
		notNegative("odometry drift", o.Odometry.Drift, maxMetres), notNegative("odometry noise of turning", o.Odometry.Turn, maxMetres),
		notNegative("share of wrong identities", o.Wrong.Share, 1),
	} {
		if err != nil {
			return err
		}
	}
	if !(math.Abs(o.FromS) <= maxLogTime) || !(o.ToS > o.FromS) || !(o.ToS <= maxLogTime || math.IsInf(o.ToS, 1)) {
		return fmt.Errorf("survey: part of the log from %g to %g s, expected one that ends after it begins", o.FromS, o.ToS)
	}
	return nil
}

// LogCount is what became of the sightings of a log.
type LogCount struct {
	Unknown int // identity not told, left out
	Outside int // outside the part asked for or the track of one of the two, left out
	Unasked int // of a sort that was not asked for
	Thinned int // too soon after the last one of the same
	Kept    int
	Changed int // of those kept: identity made wrong on purpose
}

const logSource = "camera"

const logSession = 1

func robotName(n int) string { return fmt.Sprintf("r%d", n) }

// Survey turns the log into a survey in the plane: the commands become odometry by dead reckoning, sightings of robots become ties,
// those of landmarks sightings of marks.
func (l *SightingLog) Survey(o SightingLogOptions) (*Survey, LogCount, error) {
	var count LogCount
	if err := o.check(); err != nil {
		return nil, count, err
	}
	kept := l.keep(&o, &count)
	l.makeWrong(kept, &o)
	s := &Survey{Warnings: l.warnings, Meta: Meta{Format: formatVersion, Name: l.name, Dimension: 2, Datum: Datum{Name: "room", Level: true}}}

	moments := make(map[int][]int64)
	for i := range kept {
		m := &kept[i]
		moments[m.observer] = append(moments[m.observer], m.atNS)
		if l.commands[m.subject] != nil {
			moments[m.subject] = append(moments[m.subject], m.atNS)
		}
	}
	number := make(map[int]int)           // of the robot in the survey
	keys := make(map[int]map[int64]int64) // robot -> stamp -> keyframe
	for i, robot := range l.robots {
		number[robot] = i
		at := moments[robot]
		slices.Sort(at)
		r, err := l.track(robot, slices.Compact(at), &o)
		if err != nil {
			return nil, count, err
		}
		s.Meta.Robots = append(s.Meta.Robots, RobotMeta{ID: r.ID, Sessions: []uint32{logSession}, GravityAligned: true})
		keys[robot] = make(map[int64]int64, len(r.Keyframes))
		for _, k := range r.Keyframes {
			keys[robot][k.StampNS] = k.ID
		}
		s.Truth = append(s.Truth, l.truthOf(robot, r.Keyframes)...)
		s.Robots = append(s.Robots, r)
	}
	marks := make(map[string]bool)
	for i := range kept {
		m := &kept[i]
		stamp := l.originNS + m.atNS
		sight := Sight{Value: [3]float64{m.rangeM, m.bearing}, Sigma: [3]float64{o.SigmaRange, o.SigmaBearing, math.Inf(1)}}
		if m.was > 0 {
			count.Changed++
		}
		if l.commands[m.subject] != nil {
			t := Tie{ID: fmt.Sprintf("s%06d", len(s.Ties)+1), FromRobot: robotName(m.observer), FromSession: logSession, FromKey: keys[m.observer][stamp],
				ToRobot: robotName(m.subject), ToSession: logSession, ToStampNS: stamp, ToByStamp: true,
				Kind: RangeBearing, Sight: sight, Source: logSource, StampNS: stamp, HasStamp: true}
			s.Ties = append(s.Ties, t)
			if m.was > 0 {
				s.Injected = append(s.Injected, Injected{Robot: t.FromRobot, Session: logSession, Key: t.FromKey, Tie: t.ID, Was: robotName(m.was), Named: t.ToRobot})
			}
			continue
		}
		name := o.markName(m.observer, m.subject)
		if !marks[name] {
			marks[name] = true
			mark := Mark{Name: name}
			if known, ok := l.landmarks[m.subject]; ok && o.Role != PlainMark {
				mark = known
				mark.Name, mark.Role = name, o.Role
			}
			s.Marks = append(s.Marks, mark)
		}
		r := &s.Robots[number[m.observer]]
		r.Sightings = append(r.Sightings, Sighting{Session: logSession, Key: keys[m.observer][stamp], Mark: name, Kind: RangeBearing, Sight: sight})
		if m.was > 0 {
			s.Injected = append(s.Injected, Injected{Robot: r.ID, Session: logSession, Key: keys[m.observer][stamp], Row: len(r.Sightings), Was: o.markName(m.observer, m.was), Named: name})
		}
	}
	return s, count, nil
}

// markName is the name of a landmark that a robot has seen.
func (o *SightingLogOptions) markName(observer, subject int) string {
	name := fmt.Sprintf("m%d", subject)
	if o.Marks == PrivateMarks {
		name = robotName(observer) + "." + name
	}
	return name
}

// keep returns the sightings that are asked for, at the moments that they show.
func (l *SightingLog) keep(o *SightingLogOptions, count *LogCount) []logSighting {
	type pair struct{ observer, subject int }
	last := make(map[pair]int64)
	spans := make(map[int]span)
	for _, robot := range l.robots {
		spans[robot] = l.span(robot, o)
	}
	var kept []logSighting
	for _, m := range l.sightings {
		m.atNS -= nanoseconds(o.EarlierS)
		other, isRobot := spans[m.subject]
		p := pair{m.observer, m.subject}
		before, seen := last[p]
		switch {
		case m.subject == 0:
			count.Unknown++
		case !spans[m.observer].holds(m.atNS) || isRobot && !other.holds(m.atNS):
			count.Outside++
		case isRobot && !o.Robots || !isRobot && o.Marks == NoMarks:
			count.Unasked++
		case seen && m.atNS-before < nanoseconds(o.ThinS):
			count.Thinned++
		default:
			last[p] = m.atNS
			kept = append(kept, m)
		}
	}
	count.Kept = len(kept)
	return kept
}

// truthOf returns the true poses of keyframes.
func (l *SightingLog) truthOf(robot int, keyframes []Keyframe) (out []TruthPose) {
	for i := range keyframes {
		if p, ok := at(l.truth[robot], keyframes[i].StampNS-l.originNS); ok {
			out = append(out, TruthPose{Robot: robotName(robot), Session: logSession, Key: keyframes[i].ID, Pose: p})
		}
	}
	return out
}

// Wrong are identities that are made wrong on purpose, to try what finds them: a subject becomes another one of its sort, robot or
// landmark.
type Wrong struct {
	Share    float64 // of the sightings that are kept
	Meetings bool    // whole meetings instead of single rows: what one robot sees of one subject without a pause
	Seed     uint64
}

// pause ends a meeting.
const pause = int64(2e9)

// makeWrong changes the identities of some of the sightings.
func (l *SightingLog) makeWrong(kept []logSighting, o *SightingLogOptions) {
	left := int(math.Round(o.Wrong.Share * float64(len(kept))))
	if left == 0 {
		return
	}
	rng := rand.New(rand.NewPCG(o.Wrong.Seed, 0x5e1f))
	groups := l.meetings(kept)
	if !o.Wrong.Meetings {
		groups = make([][]int, len(kept))
		for i := range groups {
			groups[i] = []int{i}
		}
	}
	var subjects []int // that occur, ascending
	for i := range kept {
		subjects = append(subjects, kept[i].subject)
	}
	slices.Sort(subjects)
	subjects = slices.Compact(subjects)
	spans := make(map[int]span)
	for _, robot := range l.robots {
		spans[robot] = l.span(robot, o)
	}
	for _, g := range rng.Perm(len(groups)) {
		if left <= 0 {
			return
		}
		rows := groups[g]
		was := &kept[rows[0]]
		_, isRobot := spans[was.subject]
		var others []int
		for _, s := range subjects {
			other, alike := spans[s]
			if s == was.subject || s == was.observer || alike != isRobot || alike && !(other.holds(was.atNS) && other.holds(kept[rows[len(rows)-1]].atNS)) {
				continue
			}
			others = append(others, s)
		}
		if len(others) == 0 {
			continue
		}
		to := others[rng.IntN(len(others))]
		for _, i := range rows {
			kept[i].subject, kept[i].was = to, kept[i].subject
		}
		left -= len(rows)
	}
}

// meetings groups the sightings of one subject by one robot that follow each other without a pause.
func (l *SightingLog) meetings(kept []logSighting) (groups [][]int) {
	type pair struct{ observer, subject int }
	open := make(map[pair]int)
	for i := range kept {
		p := pair{kept[i].observer, kept[i].subject}
		g, seen := open[p]
		if !seen || kept[i].atNS-kept[groups[g][len(groups[g])-1]].atNS > pause {
			g = len(groups)
			open[p] = g
			groups = append(groups, nil)
		}
		groups[g] = append(groups[g], i)
	}
	return groups
}
