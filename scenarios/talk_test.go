package scenarios

import (
	"flag"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"selvage/agent"
	"selvage/coordinator"
	"selvage/internal/lie"
	"selvage/msgs"
)

var rewrite = flag.Bool("rewrite", false, "record the conversations of testdata/talk anew")

// TestTalk plays conversations between robots and base. A file holds commands, on lines that begin with "> ", each followed by
// what it caused. Comments begin with "#". With -rewrite what was caused is recorded; review it as a difference.
//
//	base N [hold]                  a base of incarnation N with an empty store takes over, the old one is gone; hold: all ties are true
//	robot NAME N                   an agent with journal N starts, the old one of that name is gone
//	drive NAME SESSION A..B [at X Y DEG] [turn DEG] [yaw DEG]
//	                               keyframes A to B, 1 m apart, turning by DEG at each; the odometry sees yaw more. A session begins at.
//	still NAME SESSION ID          a keyframe that no measurement connects, where the robot is
//	tie NAME/SESSION/ID NAME/SESSION/ID [off M]
//	                               the first robot measures the second, M metres to the left of the truth
//	tick T                         time passes, second by second; what is sent stays on the air
//	deliver [WORDS]                what is on the air arrives, in order; with words only messages whose text has them all
//	drop [WORDS]                   it does not
//	keep NAME WORDS                remembers the first such message on the air
//	send NAME                      it arrives (again)
//	run T                          tick and deliver by turns
//	map                            the newest epoch, the robots' own maps against the truth, the verdicts
func TestTalk(t *testing.T) {
	files, err := filepath.Glob("testdata/talk/*.txt")
	if err != nil || len(files) == 0 {
		t.Fatalf("no conversations: %v", err)
	}
	for _, name := range files {
		t.Run(strings.TrimSuffix(filepath.Base(name), ".txt"), func(t *testing.T) {
			recorded, err := os.ReadFile(name)
			if err != nil {
				t.Fatal(err)
			}
			played, err := play(string(recorded))
			if err != nil {
				t.Fatal(err)
			}
			if *rewrite {
				if err := os.WriteFile(name, []byte(played), 0o666); err != nil {
					t.Fatal(err)
				}
				return
			}
			if d := cmp.Diff(strings.Split(string(recorded), "\n"), strings.Split(played, "\n")); d != "" {
				t.Errorf("recorded -, played +\n%s", d)
			}
		})
	}
}

// play returns the text of a conversation with everything its commands cause.
func play(text string) (string, error) {
	w := &talk{agents: map[string]*agent.Agent{}, pockets: map[string]letter{}, truth: map[msgs.KeyRef]lie.SE3{}, tracks: map[msgs.KeyRef]*drive{}}
	for n, line := range strings.Split(strings.TrimRight(text, "\n"), "\n") {
		switch {
		case strings.HasPrefix(line, "#"), line == "":
			fmt.Fprintln(&w.out, line)
		case strings.HasPrefix(line, "> "):
			fmt.Fprintln(&w.out, line)
			if err := w.command(strings.Fields(line[2:])); err != nil {
				return "", fmt.Errorf("line %d, %s: %w", n+1, line, err)
			}
		}
	}
	return w.out.String(), nil
}

// talk is a small planar world: robots, a base, and what is on the air between them.
type talk struct {
	out     strings.Builder
	now     int64
	agents  map[string]*agent.Agent
	names   []string
	base    *coordinator.Coordinator
	air     []letter
	pockets map[string]letter
	truth   map[msgs.KeyRef]lie.SE3
	tracks  map[msgs.KeyRef]*drive // by robot and session
}

// drive is where a session has come to.
type drive struct {
	real, front lie.SE3
	last        int64
}

// letter is a message on the air.
type letter struct {
	robot, kind string
	up          bool
	payload     []byte
}

const talkFleet = "talk"

func (w *talk) command(f []string) error {
	switch f[0] {
	case "base":
		c := coordinator.DefaultConfig(talkFleet, 2)
		c.SolveNS, c.Incarnation = 10*tickNS, uint64(number(f[1]))
		c.HoldAll = slices.Contains(f, "hold")
		w.base = coordinator.New(c)
	case "robot":
		c := agent.DefaultConfig(talkFleet, f[1], 2)
		c.PublishNS, c.SettleNS, c.AnswerNS = 5*tickNS, 5*tickNS, 30*tickNS
		c.Journal = msgs.JournalID{byte(number(f[2]))}
		if w.agents[f[1]] == nil {
			w.names = append(w.names, f[1])
		}
		w.agents[f[1]] = agent.New(c)
	case "drive":
		return w.drive(f[1:])
	case "still":
		d := w.tracks[session(f[1], f[2])]
		d.last = int64(number(f[3]))
		return w.keyframe(f[1], session(f[1], f[2]).Session, d)
	case "tie":
		from, to := reference(f[1]), reference(f[2])
		z := w.truth[from].Between(w.truth[to])
		if len(f) > 3 {
			z.T[1] += number(f[4])
		}
		return w.event(from.Robot, agent.Tie{From: from, To: to, Z: z, Info: diagonal(0.05, 0.01), Source: "seen"})
	case "tick", "run":
		d, err := time.ParseDuration(f[1])
		if err != nil {
			return err
		}
		for end := w.now + int64(d); w.now < end; {
			if err := w.tick(); err != nil {
				return err
			}
			if f[0] == "run" {
				w.deliver(nil)
			}
		}
	case "deliver":
		w.deliver(f[1:])
	case "drop":
		for _, l := range w.pick(f[1:]) {
			fmt.Fprintf(&w.out, "lost: %s\n", l.text())
		}
	case "keep":
		kept := w.pick(f[2:])
		w.air = append(kept, w.air...)
		w.pockets[f[1]] = kept[0]
	case "send":
		w.arrive(w.pockets[f[1]])
	case "map":
		w.show()
	default:
		return fmt.Errorf("command expected")
	}
	return nil
}

// drive lets a robot drive on.
func (w *talk) drive(f []string) error {
	s := session(f[0], f[1])
	first, last, _ := strings.Cut(f[2], "..")
	turn, yaw := 0.0, 0.0
	for k := 3; k < len(f); k++ {
		switch f[k] {
		case "at":
			w.tracks[s] = &drive{real: plane(number(f[k+1]), number(f[k+2]), number(f[k+3])), front: lie.Identity(), last: -1}
		case "turn":
			turn = number(f[k+1])
		case "yaw":
			yaw = number(f[k+1])
		}
	}
	d := w.tracks[s]
	for id := int64(number(first)); id <= int64(number(last)); id++ {
		from := d.last
		if from >= 0 {
			d.real = d.real.Mul(plane(1, 0, turn))
			d.front = d.front.Mul(plane(1, 0, turn+yaw))
		}
		d.last = id
		if err := w.keyframe(f[0], s.Session, d); err != nil {
			return err
		}
		if from >= 0 {
			step := agent.Relative{Session: s.Session, From: from, To: id, Z: plane(1, 0, turn+yaw), Info: diagonal(0.02, 0.01)}
			if err := w.event(f[0], step); err != nil {
				return err
			}
		}
	}
	return nil
}

func (w *talk) keyframe(robot string, session uint32, d *drive) error {
	w.truth[msgs.KeyRef{Robot: robot, Session: session, ID: d.last}] = d.real
	return w.event(robot, agent.Keyframe{Session: session, ID: d.last, StampNS: w.now + d.last, Pose: d.front})
}

// event hands an agent something of its own; a refusal is part of the conversation.
func (w *talk) event(robot string, e agent.Event) error {
	a := w.agents[robot]
	if a == nil {
		return fmt.Errorf("no robot %s", robot)
	}
	out, err := a.Handle(w.now, e)
	if err != nil {
		fmt.Fprintf(&w.out, "%s refuses: %v\n", robot, err)
	}
	w.send(robot, out)
	return nil
}

func (w *talk) send(robot string, out []agent.Publish) {
	for _, p := range out {
		w.post(letter{robot: robot, kind: p.Kind, up: true, payload: p.Payload})
	}
}

func (w *talk) post(l letter) {
	fmt.Fprintf(&w.out, "%ds %s\n", w.now/tickNS, l.text())
	w.air = append(w.air, l)
}

// tick lets a second pass.
func (w *talk) tick() error {
	w.now += tickNS
	for _, name := range w.names {
		if err := w.event(name, agent.Tick{}); err != nil {
			return err
		}
	}
	out, err := w.base.Tick(w.now)
	if err != nil {
		fmt.Fprintf(&w.out, "base refuses: %v\n", err)
	}
	for _, p := range out {
		w.post(letter{robot: p.Robot, kind: p.Kind, payload: p.Payload})
	}
	return nil
}

// pick takes the messages whose text has all words off the air.
func (w *talk) pick(words []string) (picked []letter) {
	var left []letter
	for _, l := range w.air {
		text := strings.Fields(l.text())
		if slices.ContainsFunc(words, func(word string) bool { return !slices.Contains(text, word) }) {
			left = append(left, l)
			continue
		}
		picked = append(picked, l)
	}
	w.air = left
	return picked
}

func (w *talk) deliver(words []string) {
	for _, l := range w.pick(words) {
		w.arrive(l)
	}
}

func (w *talk) arrive(l letter) {
	if l.up {
		if err := w.base.Message(w.now, coordinator.Message{Robot: l.robot, Kind: l.kind, Payload: l.payload}); err != nil {
			fmt.Fprintf(&w.out, "base refuses: %v\n", err)
		}
		return
	}
	out, err := w.agents[l.robot].Handle(w.now, agent.Message{Kind: l.kind, Payload: l.payload})
	if err != nil {
		fmt.Fprintf(&w.out, "%s refuses: %v\n", l.robot, err)
	}
	w.send(l.robot, out)
}

// show prints where things stand.
func (w *talk) show() {
	fmt.Fprintf(&w.out, "epoch %s, base settled %v\n", epoch(w.base.Epoch()), w.base.Settled())
	frames := map[string]lie.SE3{} // truth_from_datum by island, from its first junction
	for _, p := range w.base.Map() {
		if !p.Joined {
			fmt.Fprintf(&w.out, "%s/%d apart\n", p.Robot, p.Session)
			continue
		}
		if _, known := frames[p.Island]; !known {
			frames[p.Island] = w.truth[msgs.KeyRef{Robot: p.Robot, Session: p.Session, ID: p.IDs[0]}].Mul(p.Poses[0].Inv())
		}
		worst := 0.0
		for k, id := range p.IDs {
			worst = max(worst, w.off(p.Robot, p.Session, id, frames[p.Island].Mul(p.Poses[k])))
		}
		fmt.Fprintf(&w.out, "%s/%d in %s, junctions %v, off by %.0f mm\n", p.Robot, p.Session, p.Island, p.IDs, 1000*worst)
	}
	for _, name := range w.names {
		a := w.agents[name]
		fmt.Fprintf(&w.out, "%s applied %s, settled %v", name, epoch(a.Applied()), a.Settled())
		for _, t := range a.Tracks() {
			worst := 0.0
			for k, id := range t.IDs {
				worst = max(worst, w.off(name, t.Session, id, frames[t.Island].Mul(t.DatumFromSession).Mul(t.Poses[k])))
			}
			if t.Joined {
				fmt.Fprintf(&w.out, ", session %d: %d keyframes off by %.0f mm", t.Session, len(t.IDs), 1000*worst)
			}
		}
		fmt.Fprintln(&w.out)
	}
	for _, f := range w.base.Findings() {
		fmt.Fprintf(&w.out, "%s %s: %s\n", f.Tie, f.Verdict, f.Reason)
	}
}

// off is the distance of a pose from the truth, metres.
func (w *talk) off(robot string, session uint32, id int64, x lie.SE3) float64 {
	t := w.truth[msgs.KeyRef{Robot: robot, Session: session, ID: id}].T
	return math.Hypot(t[0]-x.T[0], t[1]-x.T[1])
}

// text tells a message in words.
func (l *letter) text() string {
	if !l.up {
		return fmt.Sprintf("base to %s: %s", l.robot, down(l.kind, l.payload))
	}
	return fmt.Sprintf("%s: %s", l.robot, up(l.kind, l.payload))
}

func up(kind string, payload []byte) string {
	switch kind {
	case msgs.KindTie:
		m, err := msgs.DecodeTie(payload)
		must(err)
		return fmt.Sprintf("tie %d.%d %s %s", m.Header.Journal[0], m.Header.Number, key(&m.From), key(&m.To))
	case msgs.KindSummary:
		m, err := msgs.DecodeSummary(payload)
		must(err)
		text := fmt.Sprintf("summary %d.%d answers %s", m.Header.Journal[0], m.Version, epoch(m.Answers))
		for _, p := range m.Parts {
			ids := make([]int64, len(p.Junctions))
			for k := range ids {
				ids[k] = p.Junctions[k].ID
			}
			text += fmt.Sprintf(", session %d junctions %v", p.Session, ids)
		}
		return text
	}
	m, err := msgs.DecodeHeartbeat(payload)
	must(err)
	return fmt.Sprintf("hb %d.%d summary %d applied %s base %d %s", m.Header.Journal[0], m.NewestNumber, m.SummaryVersion, epoch(m.Applied), m.HighestIncarnation, m.State)
}

func down(kind string, payload []byte) string {
	switch kind {
	case msgs.KindWant:
		m, err := msgs.DecodeWant(payload)
		must(err)
		text := fmt.Sprintf("want of base %d, safe %d.%d", m.Epoch.Incarnation, m.Journal[0], m.Safe)
		if len(m.Gaps) > 0 {
			text += fmt.Sprintf(", gaps %v", m.Gaps)
		}
		for k := range m.Keys {
			text += ", key " + key(&m.Keys[k])
		}
		return text
	case msgs.KindCorrection:
		m, err := msgs.DecodeCorrection(payload)
		must(err)
		text := fmt.Sprintf("corr %s of summary %d", epoch(m.Epoch), m.SummaryVersion)
		for _, p := range m.Parts {
			text += fmt.Sprintf(", session %d joined %v ids %v", p.Session, p.Joined, p.IDs)
		}
		return text
	}
	m, err := msgs.DecodeVerdict(payload)
	must(err)
	return fmt.Sprintf("verdict %s %s", m.Tie, m.Verdict)
}

func key(k *msgs.KeyRef) string { return fmt.Sprintf("%s/%d/%d", k.Robot, k.Session, k.ID) }
func epoch(e msgs.Epoch) string { return fmt.Sprintf("%d.%d", e.Incarnation, e.Number) }

// plane is a pose of the plane, metres and degrees.
func plane(x, y, deg float64) lie.SE3 {
	s, c := math.Sincos(deg * math.Pi / 180)
	return lie.SE2{X: x, Y: y, C: c, S: s}.Spatial()
}

func session(robot, number string) msgs.KeyRef {
	n, err := strconv.ParseUint(number, 10, 32)
	must(err)
	return msgs.KeyRef{Robot: robot, Session: uint32(n)}
}

func reference(s string) msgs.KeyRef {
	f := strings.Split(s, "/")
	k := session(f[0], f[1])
	k.ID = int64(number(f[2]))
	return k
}

func number(s string) float64 {
	v, err := strconv.ParseFloat(s, 64)
	must(err)
	return v
}

// diagonal is the information of a planar measurement with sigmas of m metres and rad radians.
func diagonal(m, rad float64) (info [36]float64) {
	info[0], info[7], info[35] = 1/(m*m), 1/(m*m), 1/(rad*rad)
	return info
}

// must stops at a mistake in a conversation.
func must(err error) {
	if err != nil {
		panic(err)
	}
}
