package scenarios

import (
	"container/heap"
	"context"
	"crypto/sha256"
	"fmt"

	"selvage/agent"
	"selvage/coordinator"
	"selvage/internal/adjust"
	"selvage/internal/survey"
	"selvage/msgs"
)

// Outing is what goes into a rehearsal: what each front end records and when it delivers it, and the link it has to the base.
type Outing struct {
	Survey *survey.Survey
	Feed   [][]Event // by robot, in the order of time
	EndNS  int64     // when the last robot is back
	Link   Link      // nil: nothing is lost or late

	// TieTrue says which ties are true, in the order of the survey; nil when nobody knows.
	TieTrue []bool
	// ClosureTrue says the same of each robot's relative poses, of which only loop closures can be false; nil when nobody knows.
	ClosureTrue [][]bool
}

// Link decides what becomes of a message between a robot and the base, see [Radio].
type Link interface {
	Up(nowNS int64, a, b string) bool
	Send(nowNS int64, from, to string, bytes int) (arriveNS []int64)
}

// Outing returns the world as it goes into a rehearsal.
func (w *World) Outing(sc *Scenario, seed uint64) *Outing {
	return &Outing{Survey: w.Survey, Feed: w.Feed, EndNS: w.EndNS, Link: NewRadio(sc, w, seed), TieTrue: w.TieTrue, ClosureTrue: w.ClosureTrue}
}

// Recorded returns a survey as an outing over at once: everything is delivered at time zero over a faultless link.
func Recorded(s *survey.Survey) *Outing {
	o := &Outing{Survey: s, Feed: make([][]Event, len(s.Robots))}
	number := map[string]int{}
	for r := range s.Robots {
		number[s.Robots[r].ID] = r
		for k := range s.Robots[r].Keyframes {
			o.Feed[r] = append(o.Feed[r], Event{Kind: KeyframeEvent, Index: k})
		}
		for k := range s.Robots[r].Relatives {
			o.Feed[r] = append(o.Feed[r], Event{Kind: RelativeEvent, Index: k})
		}
		for k := range s.Robots[r].Sightings {
			o.Feed[r] = append(o.Feed[r], Event{Kind: SightingEvent, Index: k})
		}
	}
	for k := range s.Ties {
		r := number[s.Ties[k].FromRobot]
		o.Feed[r] = append(o.Feed[r], Event{Kind: TieEvent, Index: k})
	}
	return o
}

// Settings are how agents and coordinator run in a rehearsal.
type Settings struct {
	HoldAll bool // take every tie and every loop closure as true
	// Progress is told from time to time how far the rehearsal is; it may be nil.
	Progress func(p Progress)
}

// Progress is how far a rehearsal is.
type Progress struct {
	NowNS, EndNS int64 // virtual time; the end of the outing
	Joined       int   // robots
	Held         int   // ties
}

// Run is a rehearsal that has come to its end.
type Run struct {
	Outing      *Outing
	Agents      []*agent.Agent // by robot
	Coordinator *coordinator.Coordinator
	Traffic     []Traffic // by robot
	Samples     []Sample  // about once a minute
	Settled     bool      // nothing was left to send or to answer
	Interrupted bool
	HoldAll     bool  // every tie and loop closure was taken as true
	OnBus       bool  // on the real bus: times count from its start
	EndNS       int64 // time at the end
	Rounds      int   // solutions after the last measurement had been delivered
	Refusals    []string
}

// Traffic is what one robot sent and heard, in bytes with the subject.
type Traffic struct {
	Up, Down       int
	Messages       int
	Summaries      int
	LargestSummary int
}

// Sample is the state of a rehearsal at one moment.
type Sample struct {
	NowNS  int64
	UpSum  []int // bytes sent so far, by robot
	Joined int
	ErrorM float64 // RMSE of the newest epoch's junctions against the truth; NaN where there is none
}

const (
	fleetName  = "rehearsal"
	tickNS     = int64(1e9)
	sampleNS   = 60 * tickNS
	patienceNS = 2 * 3600 * tickNS // after the outing
)

// packet is a message on its way.
type packet struct {
	atNS int64
	seq  uint64
	from string // a robot, or Base
	to   int    // robot, -1 for the base
	kind string
	data []byte
}

type inFlight []packet

func (q inFlight) Len() int { return len(q) }
func (q inFlight) Less(i, j int) bool {
	return q[i].atNS < q[j].atNS || q[i].atNS == q[j].atNS && q[i].seq < q[j].seq
}
func (q inFlight) Swap(i, j int) { q[i], q[j] = q[j], q[i] }
func (q *inFlight) Push(x any)   { *q = append(*q, x.(packet)) }
func (q *inFlight) Pop() any {
	old := *q
	x := old[len(old)-1]
	*q = old[:len(old)-1]
	return x
}

// runner feeds the cores on a virtual clock.
type runner struct {
	*Run
	number map[string]int
	flight inFlight
	seq    uint64
	next   []int // by robot: position in its feed
	track  *truthIndex
	lastNS int64 // when the last measurement was delivered
	before uint64
}

// Virtual runs an outing on a virtual clock and bus. The same outing and settings give the same run, byte for byte. When ctx ends
// the run stops where it is.
func Virtual(ctx context.Context, o *Outing, set Settings) (*Run, error) {
	r := &runner{Run: &Run{Outing: o, Traffic: make([]Traffic, len(o.Feed)), HoldAll: set.HoldAll}, number: map[string]int{}, next: make([]int, len(o.Feed))}
	r.track = newTruthIndex(o.Survey)
	dim := o.Survey.Meta.Dimension
	config := coordinator.DefaultConfig(fleetName, dim)
	config.HoldAll, config.Marks = set.HoldAll, known(o.Survey)
	r.Coordinator = coordinator.New(config)
	if err := rule(r.Coordinator, o.Survey); err != nil {
		return nil, err
	}
	for i := range o.Survey.Robots {
		id := o.Survey.Robots[i].ID
		r.number[id] = i
		c := agent.DefaultConfig(fleetName, id, dim)
		c.Journal, c.HoldAll = journalOf(id), set.HoldAll
		r.Agents = append(r.Agents, agent.New(c))
	}
	nextSample := int64(0)
	quiet := 0
	for now := int64(0); ; now += tickNS {
		if ctx.Err() != nil {
			r.Interrupted = true
			break
		}
		if err := r.until(now); err != nil {
			return nil, err
		}
		if err := r.tick(now); err != nil {
			return nil, err
		}
		if now >= nextSample {
			nextSample = now + sampleNS
			r.sample(now)
			if set.Progress != nil {
				s := &r.Samples[len(r.Samples)-1]
				set.Progress(Progress{NowNS: now, EndNS: o.EndNS, Joined: s.Joined, Held: r.held()})
			}
		}
		r.EndNS = now
		if now < o.EndNS {
			continue
		}
		if r.idle() {
			quiet++
		} else {
			quiet = 0
		}
		if quiet > 2 {
			r.Settled = true
			break
		}
		if now > o.EndNS+patienceNS {
			break
		}
	}
	r.sample(r.EndNS)
	r.Rounds = int(r.Coordinator.Epoch().Number - r.before)
	return r.Run, nil
}

// journalOf names the journal of a simulated robot.
func journalOf(id string) msgs.JournalID {
	sum := sha256.Sum256([]byte("journal of " + id))
	return msgs.JournalID(sum[:16])
}

// until delivers everything that is due before the tick at now, in the order of time.
func (r *runner) until(now int64) error {
	for {
		robot, at := -1, now+1
		for i, feed := range r.Outing.Feed {
			if k := r.next[i]; k < len(feed) && feed[k].AtNS < at {
				robot, at = i, feed[k].AtNS
			}
		}
		if len(r.flight) > 0 && r.flight[0].atNS < at {
			p := heap.Pop(&r.flight).(packet)
			if err := r.deliver(p); err != nil {
				return err
			}
			continue
		}
		if robot < 0 {
			return nil
		}
		if err := r.measure(robot, r.Outing.Feed[robot][r.next[robot]]); err != nil {
			return err
		}
		r.next[robot]++
		r.before = r.Coordinator.Epoch().Number
	}
}

// measure hands what a front end delivers to its agent.
func (r *runner) measure(robot int, e Event) error {
	event, err := FrontEnd(r.Outing.Survey, robot, e)
	if err != nil {
		return err
	}
	out, err := r.Agents[robot].Handle(e.AtNS, event)
	if err != nil {
		return fmt.Errorf("robot %s: %w", r.Outing.Survey.Robots[robot].ID, err)
	}
	r.up(e.AtNS, robot, out)
	return nil
}

// FrontEnd turns a delivery into the event its agent takes.
func FrontEnd(s *survey.Survey, robot int, e Event) (agent.Event, error) {
	switch e.Kind {
	case KeyframeEvent:
		k := &s.Robots[robot].Keyframes[e.Index]
		return agent.Keyframe{Session: k.Session, ID: k.ID, StampNS: k.StampNS, Pose: adjust.Pose(k.Pose)}, nil
	case RelativeEvent:
		m := &s.Robots[robot].Relatives[e.Index]
		info, err := m.Cov.Information(s.Meta.Dimension)
		return agent.Relative{Session: m.Session, From: m.From, To: m.To, Z: adjust.Pose(m.Pose), Info: info, Closure: m.Kind == survey.Closure}, err
	case TieEvent:
		return tieEvent(s, &s.Ties[e.Index])
	case SightingEvent:
		return sightingEvent(s, robot, &s.Robots[robot].Sightings[e.Index])
	}
	panic("scenarios: unknown kind of delivery")
}

// up puts a robot's messages on the air.
func (r *runner) up(now int64, robot int, out []agent.Publish) {
	id := r.Outing.Survey.Robots[robot].ID
	for _, p := range out {
		size := len(p.Payload) + len(msgs.UpSubject(fleetName, id, p.Kind))
		if r.Outing.Link != nil && !r.Outing.Link.Up(now, id, Base) {
			continue // no connection: nothing is sent
		}
		t := &r.Traffic[robot]
		t.Up += size
		t.Messages++
		if p.Kind == msgs.KindSummary {
			t.Summaries++
			t.LargestSummary = max(t.LargestSummary, size)
		}
		r.send(now, id, Base, packet{from: id, to: -1, kind: p.Kind, data: p.Payload}, size)
	}
}

// down puts the base's messages on the air.
func (r *runner) down(now int64, out []coordinator.Publish) {
	for _, p := range out {
		robot, ok := r.number[p.Robot]
		if !ok || r.Outing.Link != nil && !r.Outing.Link.Up(now, Base, p.Robot) {
			continue
		}
		size := len(p.Payload) + len(msgs.DownSubject(fleetName, p.Robot, p.Kind))
		r.Traffic[robot].Down += size
		r.send(now, Base, p.Robot, packet{from: Base, to: robot, kind: p.Kind, data: p.Payload}, size)
	}
}

func (r *runner) send(now int64, from, to string, p packet, size int) {
	arrive := []int64{now}
	if r.Outing.Link != nil {
		arrive = r.Outing.Link.Send(now, from, to, size)
	}
	for _, at := range arrive {
		p.atNS, p.seq = at, r.seq
		r.seq++
		heap.Push(&r.flight, p)
	}
}

// deliver hands a message that arrived to whom it is for. A refusal is noted: between sound cores there should be none but for
// what is older than what they know.
func (r *runner) deliver(p packet) error {
	if p.to < 0 {
		if err := r.Coordinator.Message(p.atNS, coordinator.Message{Robot: p.from, Kind: p.kind, Payload: p.data}); err != nil {
			r.Refusals = append(r.Refusals, err.Error())
		}
		return nil
	}
	out, err := r.Agents[p.to].Handle(p.atNS, agent.Message{Kind: p.kind, Payload: p.data})
	if err != nil {
		r.Refusals = append(r.Refusals, err.Error())
	}
	r.up(p.atNS, p.to, out)
	return nil
}

// tick lets a second pass for everyone.
func (r *runner) tick(now int64) error {
	for i, a := range r.Agents {
		out, err := a.Handle(now, agent.Tick{})
		if err != nil {
			return fmt.Errorf("robot %s: %w", r.Outing.Survey.Robots[i].ID, err)
		}
		r.up(now, i, out)
	}
	out, err := r.Coordinator.Tick(now)
	if err != nil {
		return fmt.Errorf("coordinator: %w", err)
	}
	r.down(now, out)
	return nil
}

// idle tells whether nothing is left to happen.
func (r *runner) idle() bool {
	if len(r.flight) > 0 || !r.Coordinator.Settled() {
		return false
	}
	for i, a := range r.Agents {
		if r.next[i] < len(r.Outing.Feed[i]) || !a.Settled() {
			return false
		}
	}
	return true
}

func (r *runner) held() int {
	n := 0
	for _, f := range r.Coordinator.Findings() {
		if f.Verdict == msgs.Held {
			n++
		}
	}
	return n
}

// sample notes the state of the run.
func (r *runner) sample(now int64) {
	s := Sample{NowNS: now, UpSum: make([]int, len(r.Traffic))}
	for i := range r.Traffic {
		s.UpSum[i] = r.Traffic[i].Up
	}
	joined := map[string]bool{}
	placed := r.Coordinator.Map()
	for i := range placed {
		if placed[i].Joined {
			joined[placed[i].Robot] = true
		}
	}
	s.Joined = len(joined)
	s.ErrorM = r.track.errorOf(placed)
	r.Samples = append(r.Samples, s)
}
