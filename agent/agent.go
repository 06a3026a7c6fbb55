package agent

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"selvage/internal/lie"
	"selvage/msgs"
)

// Config is fixed for the life of an agent.
type Config struct {
	Fleet, Robot string
	Dim          int            // of the survey: 2 or 3
	Journal      msgs.JournalID // names the numbering of this robot's records

	// PublishNS is the least time between two summaries, nanoseconds.
	PublishNS int64
	// SettleNS: without new measurements for this long the robot counts as settled, and what is due is sent at once.
	SettleNS int64
	// TrafficShare bounds summaries while the survey grows: a new one waits until its size is below this share of the raw
	// measurements taken since the last one.
	TrafficShare float64
	// HeartbeatNS is the period of heartbeats.
	HeartbeatNS int64
	// RetryNS is the first waiting time before a tie that is not safe is sent again; it doubles up to sixteen times.
	RetryNS int64
	// AnswerNS is the same for a summary without a correction; it should exceed the time the base takes between solutions.
	AnswerNS int64
	// HoldAll takes every loop closure and every sighting as true.
	HoldAll bool
	// Level is how well the front end knows the vertical, radians: the z axis of a session's frame points up to within this sigma. 0 when
	// it does not know; without meaning in the plane. The base learns it with the summary.
	Level float64
}

const second = int64(1e9)

// never is the time of what has not happened.
const never = math.MinInt64

// DefaultConfig returns the settings for a survey at walking pace on a thin radio link.
func DefaultConfig(fleet, robot string, dim int) Config {
	return Config{
		Fleet: fleet, Robot: robot, Dim: dim,
		PublishNS: 10 * second, SettleNS: 20 * second, TrafficShare: 0.25, HeartbeatNS: 15 * second, RetryNS: 10 * second,
		AnswerNS: 90 * second,
	}
}

// RawPoseBytes, RawMeasurementBytes and RawSightingBytes are what a pose, a measurement and the sighting of a mark would take if they
// crossed the link themselves.
const (
	RawPoseBytes        = 58
	RawMeasurementBytes = 144
	RawSightingBytes    = 60
)

// Event is something that happens to an agent: [Keyframe], [Relative], [Sighting], [Tie], [Message] or [Tick].
type Event interface{ event() }

// Keyframe is a new keyframe of the front end: its pose in the session's frame as the front end has it.
type Keyframe struct {
	Session uint32
	ID      int64
	StampNS int64
	Pose    lie.SE3
}

// Relative is a relative pose within one session, from odometry or from a loop closure: Z is the pose of To in From.
type Relative struct {
	Session  uint32
	From, To int64
	Z        lie.SE3
	Info     [36]float64 // order x, y, z, rx, ry, rz; zero rows and columns for what was not measured
	Closure  bool        // a loop closure, which may be false; odometry is taken as it is
}

// Tie is a measurement of another robot, or of another session, by this one: Z is the pose of To in From, or a sight of a spot on To by
// a sensor on From. Each end is a keyframe or a moment; a moment of this robot that its odometry has not yet reached is waited for.
type Tie struct {
	ID       string // empty: named after the record
	From, To msgs.KeyRef
	Z        lie.SE3
	Info     [36]float64
	Sight    *Sight // instead of Z and Info, which are then not looked at
	Source   string
	StampNS  int64
}

// Message is a message from the base.
type Message struct {
	Kind    string // as in package msgs
	Payload []byte
}

// Tick lets time pass.
type Tick struct{}

func (Keyframe) event() {}
func (Relative) event() {}
func (Tie) event()      {}
func (Message) event()  {}
func (Tick) event()     {}

// Publish is an effect: a message for the base.
type Publish struct {
	Kind    string
	Payload []byte
	Number  uint64 // record number of a tie, version of a summary, else 0
}

// Agent is the core. Its methods must not be called concurrently.
type Agent struct {
	cfg      Config
	sessions []*session // ascending

	records []record // every tie, record n at n-1: a base that lost its store asks for all of them again
	newest  uint64   // record number
	safe    uint64   // the base holds every record up to this one

	version   uint64 // of the newest summary made
	payload   []byte // that summary
	answered  bool   // a correction that used it arrived
	sentNS    int64  // when it was last sent, or when making one failed
	tries     int
	rawNow    int   // bytes of the raw graph
	rawAtSend int   // when the newest summary was made
	lastNS    int64 // of the newest measurement
	wanted    bool  // separators were asked for that the newest summary lacks
	relinear  bool  // the newest correction makes it worth condensing again

	applied     msgs.Epoch
	floor       msgs.Epoch // of the newest correction before a restart
	term        uint64
	incarnation uint64
	beatNS      int64
	beatDue     bool
	begun       bool
}

// record is a tie in the order of the journal.
type record struct {
	number  uint64
	payload []byte
	sentNS  int64
	tries   int
}

// New returns an agent without measurements.
func New(cfg Config) *Agent {
	if cfg.Dim != 2 && cfg.Dim != 3 {
		panic("agent: dimension 2 or 3")
	}
	if !(cfg.Level >= 0 && cfg.Level <= math.Pi) {
		panic("agent: level is an angle")
	}
	return &Agent{cfg: cfg, sentNS: never}
}

// Handle takes one event at the time nowNS (nanoseconds of the agent's clock, never decreasing) and returns what is to be
// published. An error says why an event was refused; the agent is then as it was before it.
func (a *Agent) Handle(nowNS int64, e Event) ([]Publish, error) {
	if !a.begun {
		a.begun = true
		a.beatNS, a.lastNS = nowNS-a.cfg.HeartbeatNS, nowNS
	}
	switch e := e.(type) {
	case Keyframe:
		return nil, a.keyframe(nowNS, &e)
	case Relative:
		return nil, a.relative(nowNS, &e)
	case Sighting:
		return nil, a.sighting(nowNS, &e)
	case Tie:
		return a.tie(nowNS, &e)
	case Message:
		return a.message(nowNS, e)
	case Tick:
		return a.tick(nowNS)
	}
	panic(fmt.Sprintf("agent: event of type %T", e))
}

// find returns where the session with that number stands, or belongs.
func (a *Agent) find(id uint32) (int, bool) {
	return slices.BinarySearchFunc(a.sessions, id, func(s *session, id uint32) int { return cmp.Compare(s.id, id) })
}

// session returns the session with that number, nil when it has no keyframe.
func (a *Agent) session(id uint32) *session {
	if i, found := a.find(id); found {
		return a.sessions[i]
	}
	return nil
}

// keyframe takes a keyframe; the first of a session begins it.
func (a *Agent) keyframe(nowNS int64, k *Keyframe) error {
	if err := checkPose(&k.Pose, a.cfg.Dim); err != nil {
		return fmt.Errorf("keyframe %d of session %d: %w", k.ID, k.Session, err)
	}
	i, found := a.find(k.Session)
	if !found {
		if len(a.sessions) == msgs.MaxParts {
			return fmt.Errorf("keyframe %d begins session %d: there are %d already, the most a summary can hold", k.ID, k.Session, msgs.MaxParts)
		}
		a.sessions = slices.Insert(a.sessions, i, newSession(k.Session, &a.cfg))
	}
	if err := a.sessions[i].addKeyframe(k); err != nil {
		return err
	}
	a.lastNS = nowNS
	a.rawNow += RawPoseBytes
	return nil
}

func (a *Agent) relative(nowNS int64, r *Relative) error {
	s := a.session(r.Session)
	if s == nil {
		return fmt.Errorf("relative pose from %d to %d: session %d has no keyframe", r.From, r.To, r.Session)
	}
	if err := s.addRelative(r); err != nil {
		return err
	}
	a.lastNS = nowNS
	a.rawNow += RawMeasurementBytes
	return nil
}

// tie numbers a tie and sends it; it stays in records until the base says it is safe.
func (a *Agent) tie(nowNS int64, t *Tie) ([]Publish, error) {
	own := t.From
	if own.Robot != a.cfg.Robot {
		own = t.To
	}
	if own.Robot != a.cfg.Robot {
		return nil, fmt.Errorf("tie %q between %s and %s: neither is %s", t.ID, t.From.Robot, t.To.Robot, a.cfg.Robot)
	}
	switch s := a.session(own.Session); {
	case s == nil:
		return nil, fmt.Errorf("tie %q: session %d is not known to %s", t.ID, own.Session, a.cfg.Robot)
	case !own.ByStamp && !s.knows(own.ID):
		return nil, fmt.Errorf("tie %q: keyframe %d of session %d is not known to %s", t.ID, own.ID, own.Session, a.cfg.Robot)
	case own.ByStamp:
		if err := s.begins(own.StampNS); err != nil {
			return nil, fmt.Errorf("tie %q: %w", t.ID, err)
		}
	}
	number := a.newest + 1
	id := t.ID
	if id == "" {
		id = fmt.Sprintf("%s.%x.%d", a.cfg.Robot, a.cfg.Journal[:4], number)
	}
	m := msgs.Tie{
		Header: a.header(number, own.Session), ID: id, From: t.From, To: t.To, Dim: a.width(), Source: t.Source, StampNS: t.StampNS,
	}
	if t.Sight != nil {
		sight, err := t.Sight.checked(a.cfg.Dim)
		if err != nil {
			return nil, fmt.Errorf("tie %q: %w", id, err)
		}
		m.Sight = sight.wire()
	} else {
		if err := checkMeasurement(&t.Z, &t.Info, a.cfg.Dim); err != nil {
			return nil, fmt.Errorf("tie %q: %w", id, err)
		}
		m.Pose, m.Info = wirePose(&t.Z, a.cfg.Dim), compact(&t.Info, a.cfg.Dim)
	}
	payload, err := m.Marshal()
	if err != nil {
		return nil, fmt.Errorf("tie %q: %w", id, err)
	}
	a.newest, a.lastNS = number, nowNS
	a.rawNow += RawMeasurementBytes
	for _, end := range [2]*msgs.KeyRef{&t.From, &t.To} {
		if end.Robot == a.cfg.Robot {
			a.separate(end, true)
		}
	}
	a.records = append(a.records, record{number: number, payload: payload, sentNS: nowNS})
	return []Publish{{msgs.KindTie, payload, number}}, nil
}

// separate makes the keyframe that a reference names a separator, if it is none yet. With await, a moment that the odometry has not
// reached is kept until it has.
func (a *Agent) separate(k *msgs.KeyRef, await bool) {
	s := a.session(k.Session)
	if s == nil {
		return
	}
	v, known := s.index[k.ID]
	if k.ByStamp {
		v, known = s.answer(k.StampNS)
		if !known && await {
			s.await(awaited{k.StampNS, -1})
		}
		a.wanted = a.wanted || known // the next summary tells which one it is
	}
	if known && s.separate(v) {
		a.wanted = true
	}
}

func (a *Agent) header(number uint64, session uint32) msgs.Header {
	return msgs.Header{Fleet: a.cfg.Fleet, Robot: a.cfg.Robot, Journal: a.cfg.Journal, Number: number, Session: session}
}

// width is the number of scalars of a pose's tangent.
func (a *Agent) width() int { return 3 * (a.cfg.Dim - 1) }

// latestSession is the number of the newest session, 0 before the first.
func (a *Agent) latestSession() uint32 {
	if len(a.sessions) == 0 {
		return 0
	}
	return a.sessions[len(a.sessions)-1].id
}
