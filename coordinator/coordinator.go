package coordinator

import (
	"cmp"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/msgs"

	"gonum.org/v1/gonum/stat/distuv"
)

// Config is fixed for the life of a coordinator.
type Config struct {
	Fleet       string
	Dim         int                  // of the survey: 2 or 3
	Incarnation uint64               // of the base's store
	Epoch       uint64               // number of the newest solution that an earlier coordinator made on that store
	History     map[TieName][]Change // what earlier ones found of ties
	Term        uint64               // of the lease under which it speaks
	SolveNS     int64                // least time between two solutions, nanoseconds
	PromptNS    int64                // the same once every robot has answered the last solution and nothing is missing
	RetryNS     int64                // first waiting time before something unanswered is sent again; it doubles up to sixteen times
	HoldAll     bool                 // take every tie as true
	Marks       []Mark               // whose coordinates are known
	LevelDatum  bool                 // in space: z points up in these coordinates
	Evidence    evidence.Options
}

const second = int64(1e9)

// DefaultConfig returns the settings for a survey at walking pace on a thin radio link.
func DefaultConfig(fleet string, dim int) Config {
	return Config{
		Fleet: fleet, Dim: dim, Incarnation: 1, Term: 1, SolveNS: 30 * second, PromptNS: 12 * second, RetryNS: 10 * second,
		Evidence: evidence.DefaultOptions(dim),
	}
}

// Message is a message from a robot, or a ruling from a person, with the kind and robot of its subject.
type Message struct {
	Robot   string // empty for a ruling
	Kind    string
	Payload []byte
}

// Publish is an effect: a message for a robot.
type Publish struct {
	Robot   string
	Kind    string
	Payload []byte
}

// Coordinator is the core. Its methods must not be called concurrently.
type Coordinator struct {
	cfg      Config
	limit    float64 // chi-square beyond which a tie contradicts the joint solution
	robots   map[string]*robot
	marks    map[string]*Mark
	ties     map[TieName]*tie
	order    []*tie // as they came
	turns    int    // changes in the histories of all ties, but for the first of each
	rulings  map[subject]*msgs.Ruling
	epoch    uint64
	now      int64
	solved   int64  // time of the newest solution
	dirty    bool   // summaries or ties came that it does not contain
	revision uint64 // counts them
	begun    bool
	left     bool                 // the newest solution left something to gain
	rest     bool                 // the present solution is to leave nothing
	places   map[unitID]placement // of the newest epoch
	joint    *joint               // behind it
	promise  promise
	datums   uint64 // counts the datums ever made
}

// TieName names a tie by the robot that measured it and its id there: what a robot calls it concerns no other robot.
type TieName struct{ Robot, ID string }

// unitID names a session of a robot.
type unitID struct {
	robot   string
	session uint32
}

func (u unitID) compare(v unitID) int {
	if u.robot != v.robot {
		if u.robot < v.robot {
			return -1
		}
		return 1
	}
	return int(int64(u.session) - int64(v.session))
}

// placement is where one unit stands in the newest epoch.
type placement struct {
	island island
	joined bool
	datum  lie.SE3 // datum_from_session
	ids    []int64
	poses  []lie.SE3 // of the junctions, in the datum
	points []msgs.Point
}

// island is a datum: its birth number and the junction that carries it.
type island struct {
	born   uint64
	anchor unitID
	key    int64
	pose   lie.SE3 // of that junction, for as long as the datum lives

	control bool // no junction carries it: control marks hold it
	level   bool // z points up
}

// ControlDatum is the name of the island that the control points hold.
const ControlDatum = "control"

// controlBorn is the birth number of the datum of the control marks.
const controlBorn = math.MaxUint64

func (i *island) name() string {
	if i.control {
		return ControlDatum
	}
	return fmt.Sprintf("%s.%d.%d", i.anchor.robot, i.anchor.session, i.key)
}

// robot is what the base knows of one robot.
type robot struct {
	name    string
	summary *msgs.Summary
	former  []msgs.Part     // what the agent of an earlier journal said last
	index   []map[int64]int // part -> junction id -> junction
	stamps  []map[int64]int // part -> resolved stamp -> junction
	units   []*unitModel    // cached, part by part

	journals map[msgs.JournalID]*journal
	current  *journal // the newest of them

	applied     msgs.Epoch
	version     uint64 // of the newest summary by the heartbeat
	incarnation uint64 // of the newest base it has heard of
	heard       bool   // a heartbeat came

	missing   []msgs.KeyRef // keyframes wanted, as of revision missingAt
	missingAt uint64
	marks     []string // wanted as points
	unplaced  int      // of these, those that are none yet
	marksAt   uint64

	used     uint64 // version in the newest epoch
	corr     []byte
	corrNS   int64
	tries    int
	want     []byte
	wantNS   int64
	wantBusy bool // separators or records are missing
	wantTry  int
}

// tie is one tie with its verdict.
type tie struct {
	msg     *msgs.Tie
	z       lie.SE3
	info    [36]float64
	cov     [36]float64
	regular bool   // the information has full rank
	sight   *sight // instead of z, info and cov, for a tie that is less than a pose
	finding Finding
	history []Change
	ruled   *msgs.Ruling // nil: it is left to the evidence
	told    *msgs.Ruling // the same when the last change was recorded
}

// Finding is the present verdict on a tie.
type Finding struct {
	Tie     string
	From    msgs.KeyRef
	To      msgs.KeyRef
	Verdict msgs.VerdictKind
	Reason  string
	msgs.Evidence
	SinceNS int64 // when the verdict last changed; before the first solution: when the tie came
}

// New returns a coordinator that has heard nothing yet.
func New(cfg Config) *Coordinator {
	if cfg.Dim != 2 && cfg.Dim != 3 {
		panic("coordinator: dimension 2 or 3")
	}
	cfg.check()
	limit := distuv.ChiSquared{K: float64(3 * (cfg.Dim - 1))}.Quantile(acceptance)
	c := &Coordinator{
		cfg: cfg, limit: limit, epoch: cfg.Epoch, robots: map[string]*robot{}, marks: map[string]*Mark{}, ties: map[TieName]*tie{},
		rulings: map[subject]*msgs.Ruling{}, places: map[unitID]placement{},
	}
	for i := range cfg.Marks {
		c.marks[cfg.Marks[i].Name] = &cfg.Marks[i]
	}
	return c
}

// Message takes a message from a robot, or a ruling, at the time nowNS. An error says why it was refused; nothing has changed then. Old and
// repeated messages are no error and change nothing.
func (c *Coordinator) Message(nowNS int64, m Message) error {
	c.now = max(c.now, nowNS)
	switch m.Kind {
	case msgs.KindTie:
		t, err := msgs.DecodeTie(m.Payload)
		if err != nil {
			return err
		}
		if err := c.from(&t.Header, m.Robot); err != nil {
			return err
		}
		return c.takeTie(t)
	case msgs.KindSummary:
		s, err := msgs.DecodeSummary(m.Payload)
		if err != nil {
			return err
		}
		if err := c.from(&s.Header, m.Robot); err != nil {
			return err
		}
		return c.takeSummary(s)
	case msgs.KindHeartbeat:
		h, err := msgs.DecodeHeartbeat(m.Payload)
		if err != nil {
			return err
		}
		if err := c.from(&h.Header, m.Robot); err != nil {
			return err
		}
		return c.takeHeartbeat(h)
	case msgs.KindRule:
		r, err := msgs.DecodeRuling(m.Payload)
		if err != nil {
			return err
		}
		return c.Rule(nowNS, *r)
	}
	return fmt.Errorf("message of kind %q from %s: expected tie, summary, hb or rule", m.Kind, m.Robot)
}

func (c *Coordinator) from(h *msgs.Header, robot string) error {
	if h.Fleet != c.cfg.Fleet || h.Robot != robot {
		return fmt.Errorf("message of %s of fleet %s came as %s of fleet %s", h.Robot, h.Fleet, robot, c.cfg.Fleet)
	}
	return nil
}

// maxRobots bounds what names can fill.
const maxRobots = 1 << 10

// robot returns what is known of a robot, nil when it is new and there are too many.
func (c *Coordinator) robot(name string) *robot {
	r := c.robots[name]
	if r == nil && len(c.robots) < maxRobots {
		r = &robot{name: name, journals: map[msgs.JournalID]*journal{}, current: &journal{}}
		c.robots[name] = r
	}
	return r
}

// sorted returns the robots by name.
func (c *Coordinator) sorted() []*robot {
	names := slices.Sorted(maps.Keys(c.robots))
	out := make([]*robot, len(names))
	for i, n := range names {
		out[i] = c.robots[n]
	}
	return out
}

// maxTies bounds a survey.
const maxTies = 1 << 18

func (c *Coordinator) takeTie(m *msgs.Tie) error {
	if m.Dim != c.width() {
		return fmt.Errorf("tie %s: %d components, this survey has %d", m.ID, m.Dim, c.width())
	}
	r := c.robot(m.Header.Robot)
	if r == nil || len(c.order) == maxTies {
		return fmt.Errorf("tie %s of %s: more than %d robots or %d ties", m.ID, m.Header.Robot, maxRobots, maxTies)
	}
	l, err := r.journalOf(&m.Header)
	if err != nil {
		return err
	}
	fresh, err := l.take(m.Header.Number)
	if err != nil {
		return fmt.Errorf("tie %s of %s: %w", m.ID, r.name, err)
	}
	if !fresh {
		r.wantBusy = true // it sends again because it has not heard that the record is safe
		return nil
	}
	id := TieName{r.name, m.ID}
	if c.ties[id] != nil {
		return nil
	}
	t := &tie{msg: m}
	if m.Sight != nil {
		t.sight = newSight(m.Sight)
	} else {
		t.z, t.info = lie.FromQuat(m.Pose.T, m.Pose.Q), widen(m.Info, c.cfg.Dim)
		t.cov, t.regular = invert(&t.info, c.cfg.Dim)
	}
	t.finding = Finding{Tie: m.ID, From: m.From, To: m.To, Verdict: msgs.Open, Reason: "not yet weighed", SinceNS: c.now}
	t.ruled = c.rulingOn(m)
	t.history = c.cfg.History[id]
	c.ties[id] = t
	c.order = append(c.order, t)
	c.dirty = true
	c.revision++
	return nil
}

func (c *Coordinator) takeSummary(s *msgs.Summary) error {
	if s.Dim != c.width() {
		return fmt.Errorf("summary of %s: %d components, this survey has %d", s.Header.Robot, s.Dim, c.width())
	}
	r := c.robot(s.Header.Robot)
	if r == nil {
		return fmt.Errorf("summary of %s: more than %d robots", s.Header.Robot, maxRobots)
	}
	l, err := r.journalOf(&s.Header)
	if err != nil {
		return err
	}
	if l != r.current {
		return nil // of an agent that is gone
	}
	if s.Unchanged || r.summary != nil && r.summary.Header.Journal == s.Header.Journal && s.Version <= r.summary.Version {
		if r.corr != nil {
			r.corrNS = min(r.corrNS, c.now-c.cfg.RetryNS) // it sends again because it has no answer
		}
		return nil
	}
	if r.summary != nil && r.summary.Header.Journal != s.Header.Journal {
		r.former = r.summary.Parts
	}
	s.Parts = withFormer(s.Parts, r.former)
	r.summary, r.version = s, max(r.version, s.Version)
	r.index = make([]map[int64]int, len(s.Parts))
	r.stamps = make([]map[int64]int, len(s.Parts))
	r.units = make([]*unitModel, len(s.Parts))
	for i := range s.Parts {
		r.index[i] = make(map[int64]int, len(s.Parts[i].Junctions))
		r.stamps[i] = map[int64]int{}
		for k := range s.Parts[i].Junctions {
			r.index[i][s.Parts[i].Junctions[k].ID] = k
			for _, stamp := range s.Parts[i].Junctions[k].Resolved {
				r.stamps[i][stamp] = k
			}
		}
	}
	c.dirty = true
	c.revision++
	return nil
}

// withFormer adds the sessions that only an agent which is gone had told of, sessions ascending: what it said of them last stands.
func withFormer(parts, former []msgs.Part) []msgs.Part {
	session := func(p msgs.Part, id uint32) int { return cmp.Compare(p.Session, id) }
	for i := range former {
		if at, told := slices.BinarySearchFunc(parts, former[i].Session, session); !told && len(parts) < msgs.MaxParts {
			parts = slices.Insert(parts, at, former[i])
		}
	}
	return parts
}

func (c *Coordinator) takeHeartbeat(h *msgs.Heartbeat) error {
	r := c.robot(h.Header.Robot)
	if r == nil {
		return fmt.Errorf("heartbeat of %s: more than %d robots", h.Header.Robot, maxRobots)
	}
	if h.HighestIncarnation == math.MaxUint64 {
		return fmt.Errorf("heartbeat of %s: incarnation %d, expected one that another can follow", r.name, h.HighestIncarnation)
	}
	l, err := r.journalOf(&h.Header)
	if err != nil {
		return err
	}
	if h.HighestIncarnation > c.cfg.Incarnation { // this store is newer than one that the robot has heard of, and must say so
		c.cfg.Incarnation, c.epoch, c.dirty = h.HighestIncarnation+1, 0, true
	}
	r.turnTo(l)
	r.heard = true
	r.applied, r.version, r.incarnation = h.Applied, max(r.version, h.SummaryVersion), h.HighestIncarnation
	l.announced(h.NewestNumber)
	return nil
}

// width is the number of scalars of a pose's tangent.
func (c *Coordinator) width() int { return 3 * (c.cfg.Dim - 1) }

// Tick lets time pass and returns what is to be published.
func (c *Coordinator) Tick(nowNS int64) ([]Publish, error) {
	c.now = max(c.now, nowNS)
	var out []Publish
	var failed error
	c.rest = !c.dirty && c.left && c.answered()
	if (c.dirty || c.rest) && c.due() {
		c.begun, c.dirty, c.solved = true, false, c.now
		out, failed = c.solve()
	}
	for _, r := range c.sorted() {
		if r.corr != nil && r.applied.Compare(c.Epoch()) < 0 && c.now-r.corrNS >= c.cfg.RetryNS<<min(r.tries, 4) {
			r.corrNS = c.now
			r.tries++
			out = append(out, Publish{r.name, msgs.KindCorrection, r.corr})
		}
		want, err := c.want(r)
		failed = errors.Join(failed, err)
		if want != nil {
			out = append(out, Publish{r.name, msgs.KindWant, want})
		}
	}
	return out, failed
}

// due tells whether enough time has passed since the last solution.
func (c *Coordinator) due() bool {
	passed := c.now - c.solved
	return !c.begun || passed >= c.cfg.SolveNS || passed >= c.cfg.PromptNS && c.complete()
}

// complete tells whether no robot is expected to send anything: a solution now would not be overtaken by what is on its way.
func (c *Coordinator) complete() bool {
	for _, r := range c.robots {
		if r.current.gappy() || len(c.missing(r)) > 0 || c.markless(r) {
			return false
		}
		if s := r.summary; s != nil && (r.version != s.Version || r.used != 0 && r.applied != c.Epoch()) {
			return false
		}
	}
	return true
}

// Epoch is that of the newest solution; its number is zero before the first.
func (c *Coordinator) Epoch() msgs.Epoch {
	return msgs.Epoch{Incarnation: c.cfg.Incarnation, Number: c.epoch}
}

// Settled tells whether the newest solution contains everything that came and every robot has answered it.
func (c *Coordinator) Settled() bool { return !c.dirty && !c.left && c.answered() }

// answered tells whether nothing is missing at the base and every robot has answered the newest solution.
func (c *Coordinator) answered() bool {
	for _, r := range c.robots {
		if r.current.gappy() || r.wantBusy {
			return false
		}
		if r.summary == nil {
			continue
		}
		if r.used != r.summary.Version || r.version != r.summary.Version || r.applied != c.Epoch() {
			return false
		}
	}
	return true
}

// Findings returns the verdict on every tie, in the order the ties came.
func (c *Coordinator) Findings() []Finding {
	out := make([]Finding, len(c.order))
	for i, t := range c.order {
		out[i] = t.finding
	}
	return out
}
