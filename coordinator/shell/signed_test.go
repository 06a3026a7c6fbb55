package shell

import (
	"bytes"
	"context"
	"crypto/tls"
	"crypto/x509"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/nats-io/nats.go"

	"selvage/agent"
	agentshell "selvage/agent/shell"
	"selvage/coordinator"
	"selvage/internal/bus"
	"selvage/internal/config"
	"selvage/internal/door"
	"selvage/internal/enrol"
	"selvage/internal/keys"
	"selvage/internal/lie"
	"selvage/msgs"
)

// fleet is one that signs, as it is enrolled: r1, r2 and a base with a bus that talks TLS.
type fleet struct {
	folder string
	roster *config.Roster
	ring   *keys.Ring
	base   *keys.Pair
	robots map[string]*keys.Pair
	roots  *x509.CertPool
	server *bus.Server
	link   *bus.Client // of the base
}

func enrolled(t *testing.T) *fleet {
	t.Helper()
	f := &fleet{folder: filepath.Join(t.TempDir(), "keys"), robots: map[string]*keys.Pair{}, roots: x509.NewCertPool()}
	err := enrol.New(f.folder, enrol.Plan{Fleet: "f", Robots: []string{"r1", "r2"}, Hosts: []string{"127.0.0.1"}, Port: 4222, Dimension: 2, Validity: 24 * time.Hour}, time.Now())
	if err != nil {
		t.Fatal(err)
	}
	b, err := config.ReadBase(filepath.Join(f.folder, "base", "base.yaml"))
	if err != nil {
		t.Fatal(err)
	}
	f.read(t)
	if f.base, err = keys.Load(b.Keys.Seed); err != nil {
		t.Fatal(err)
	}
	for _, r := range f.roster.Names() {
		a, err := config.ReadAgent(filepath.Join(f.folder, "robots", r, "agent.yaml"))
		if err != nil {
			t.Fatal(err)
		}
		if f.robots[r], err = keys.Load(a.Keys.Seed); err != nil {
			t.Fatal(err)
		}
		ca, err := os.ReadFile(a.Bus.CA)
		if err != nil || !f.roots.AppendCertsFromPEM(ca) {
			t.Fatalf("certificate of the authority: %v", err)
		}
	}
	certificate, err := tls.LoadX509KeyPair(b.Serve.Certificate, b.Serve.Key)
	if err != nil {
		t.Fatal(err)
	}
	f.server, err = bus.Start(bus.Options{Listen: "127.0.0.1:0", StoreDir: t.TempDir(), Access: &bus.Access{
		Fleet: "f", Base: f.roster.Base, Robots: f.roster.Good(), Certificate: certificate,
	}})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { f.server.Close() })
	if f.link, err = f.server.Connect(bus.ClientOptions{Name: "base", Key: f.base}); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(f.link.Close)
	return f
}

// read takes the roster from its file.
func (f *fleet) read(t *testing.T) {
	t.Helper()
	var err error
	if f.roster, err = config.ReadRoster(filepath.Join(f.folder, "base", "robots.yaml")); err != nil {
		t.Fatal(err)
	}
	if f.ring, err = f.roster.Ring(); err != nil {
		t.Fatal(err)
	}
}

// lead starts a leader and returns it once it leads.
func (f *fleet) lead(t *testing.T) (*Shell, *leader) {
	t.Helper()
	l := startLeaderOf(t, f.link, "base-1", Options{Signer: f.base, Verifier: f.ring})
	l.leads()
	return <-l.shell, l
}

func (f *fleet) dial(t *testing.T, robot string) *bus.Client {
	t.Helper()
	up := make(chan bool, 100)
	c, err := bus.Dial(f.server.URL(), bus.ClientOptions{Name: robot, Key: f.robots[robot], Roots: f.roots, Connected: func(is bool) { up <- is }})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	until(t, up, "link of "+robot, func(up bool) bool { return up })
	return c
}

func sign(t *testing.T, subject string, payload []byte, by msgs.Signer) []byte {
	t.Helper()
	b, err := msgs.Sign(subject, payload, by)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// say publishes what a robot has signed.
func (f *fleet) say(t *testing.T, c *bus.Client, robot, kind, id string, payload []byte) {
	t.Helper()
	subject := msgs.UpSubject("f", robot, kind)
	publish(t, c, subject, id, sign(t, subject, payload, f.robots[robot]))
}

// counted waits until a shell has refused as many messages as wanted, and tells what else it refused.
func counted(t *testing.T, refused func() []door.Count, want ...door.Count) {
	t.Helper()
	poll(t, func() string {
		if diff := cmp.Diff(want, refused()); diff != "" {
			return "refused (-want +got):\n" + diff
		}
		return ""
	})
}

// poll looks until nothing is wrong any more.
func poll(t *testing.T, wrong func() string) {
	t.Helper()
	tick, late := time.NewTicker(time.Millisecond), time.After(patience)
	defer tick.Stop()
	for {
		text := wrong()
		if text == "" {
			return
		}
		select {
		case <-tick.C:
		case <-late:
			t.Fatal(text)
		}
	}
}

// stage has r1 and r2 joined by one tie, r2 as an agent that follows its corrections.
type stage struct {
	*fleet
	base *Shell
	term *leader
	r1   *bus.Client
	r2   *agentshell.Shell
	raw  *nats.Conn // of r1, for what the package of the bus does not do
}

func play(t *testing.T) *stage {
	t.Helper()
	p := &stage{fleet: enrolled(t)}
	p.base, p.term = p.lead(t)
	p.r1 = p.dial(t, "r1")
	link := p.dial(t, "r2")
	c := agent.DefaultConfig("f", "r2", 2)
	c.Journal, c.PublishNS, c.SettleNS, c.RetryNS, c.HeartbeatNS, c.AnswerNS = msgs.JournalID{2}, 1e6, 1e6, 1e8, 1e8, 1e9
	toBase, err := keys.NewRing(p.roster.Base, nil)
	if err != nil {
		t.Fatal(err)
	}
	p.r2 = agentshell.New(agent.New(c), link, agentshell.Options{
		Fleet: "f", Robot: "r2", Tick: 5 * time.Millisecond, Warn: func(err error) { t.Log("r2:", err) }, Signer: p.robots["r2"], Verifier: toBase,
	})
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan struct{})
	go func() { p.r2.Run(ctx); close(ended) }()
	t.Cleanup(func() { cancel(); <-ended })
	if err := p.r2.Measure(deadline(t), track()...); err != nil {
		t.Fatal(err)
	}
	p.say(t, p.r1, "r1", msgs.KindTie, "f.r1.1", tie(t, 1))
	p.say(t, p.r1, "r1", msgs.KindSummary, "", summary(t, "r1", 1, 3))
	p.rest(t, 1)
	p.raw, err = nats.Connect(p.server.URL(), nats.Secure(&tls.Config{RootCAs: p.roots}), nats.Nkey(p.robots["r1"].Public(), p.robots["r1"].Sign), nats.CustomInboxPrefix("_INBOX_r1"))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(p.raw.Close)
	return p
}

// track is what the front end of r2 has seen.
func track() (all []agent.Event) {
	var info [36]float64
	for _, i := range [3]int{0, 1, 5} {
		info[7*i] = 100
	}
	step := lie.SE3{R: lie.Identity().R, T: [3]float64{1, 0, 0}}
	pose := lie.Identity()
	for k := range int64(3) {
		all = append(all, agent.Keyframe{Session: 1, ID: k, StampNS: k * 1e9, Pose: pose})
		pose = pose.Mul(step)
		if k > 0 {
			all = append(all, agent.Relative{Session: 1, From: k - 1, To: k, Z: step, Info: info})
		}
	}
	return all
}

// rest waits until r2 stands where the tie says and the base has this many ties.
func (p *stage) rest(t *testing.T, ties int) {
	t.Helper()
	poll(t, func() string {
		var at []coordinator.Placed
		var found []coordinator.Finding
		if err := p.base.Do(deadline(t), func(c *coordinator.Coordinator) { at, found = c.Map(), c.Findings() }); err != nil {
			t.Fatal(err)
		}
		applied := false
		if err := p.r2.Do(deadline(t), func(a *agent.Agent) { applied = a.Settled() }); err != nil {
			t.Fatal(err)
		}
		if len(at) != 2 || !at[1].Joined || len(found) != ties || !applied {
			return fmt.Sprintf("map %+v, findings %+v, r2 settled %v", at, found, applied)
		}
		if d := at[1].DatumFromSession.T; d[0]*d[0]+(d[1]-2)*(d[1]-2) > 1e-18 {
			t.Fatalf("r2 stands at %v, want 0, 2, 0", d)
		}
		return ""
	})
}

// state is what the base has made of everything: what no attack may change.
func (p *stage) state(t *testing.T) string {
	t.Helper()
	var s string
	if err := p.base.Do(deadline(t), func(c *coordinator.Coordinator) { s = fmt.Sprintf("%+v %+v", c.Map(), c.Findings()) }); err != nil {
		t.Fatal(err)
	}
	return s
}

// What a robot can put on its own subjects: not signed, signed by others or for others, too large, none at all, again, in the name of
// another. All but the last repetition is counted, and nothing of it changes the map.
func TestWhatDoesNotVerifyHasNoEffect(t *testing.T) {
	p := play(t)
	before := p.state(t)
	r1, r2 := p.robots["r1"], p.robots["r2"]
	const onTie, onSummary, onBeat = "up.f.r1.tie", "up.f.r1.summary", "up.f.r1.hb"
	put := func(subject string, b []byte) {
		t.Helper()
		publish(t, p.r1, subject, "", b)
	}
	other := func(m msgs.Tie) []byte {
		m.ID, m.Pose, m.Info, m.Dim = "x", msgs.Pose{Q: [4]float64{3: 1}}, []float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, 3
		m.From, m.To = msgs.KeyRef{Robot: "r1", Session: 1}, msgs.KeyRef{Robot: "r2", Session: 1}
		return marshal(t, &m)
	}
	put(onTie, tie(t, 2))
	put(onTie, sign(t, onTie, tie(t, 2), r2))
	put(onTie, sign(t, onTie, tie(t, 2), p.fleet.base))
	put(onTie, sign(t, "up.g.r1.tie", tie(t, 2), r1))
	put(onTie, sign(t, onSummary, tie(t, 2), r1))
	altered := sign(t, onTie, tie(t, 2), r1)
	altered[len(altered)/3] ^= 1
	put(onTie, altered)
	put(onTie, append(sign(t, onTie, tie(t, 2), r1), 8, 1))
	put(onTie, []byte("no message at all"))
	put(onTie, nil)
	put(onTie, sign(t, onTie, bytes.Repeat([]byte{8, 1}, msgs.MaxSmall), r1))                                // too large
	put(onTie, sign(t, onTie, []byte{8, 9}, r1))                                                             // of a format to come
	put(onTie, sign(t, onTie, []byte{8, 1, 16, 0, 34, 2, 'x', 'y'}, r1))                                     // without most of a tie
	put(onTie, sign(t, onTie, other(msgs.Tie{Header: msgs.Header{Fleet: "g", Robot: "r1", Number: 2}}), r1)) // signed as r1 of f, and says it is of g
	put(onTie, sign(t, onTie, other(msgs.Tie{Header: msgs.Header{Fleet: "f", Robot: "r2", Number: 2}}), r1)) // and says it is r2
	put(onSummary, summary(t, "r1", 9, 1))
	put(onSummary, sign(t, onSummary, summary(t, "r2", 9, 1), r1))
	put(onSummary+".head", sign(t, onSummary, summary(t, "r1", 9, 1), r1))
	if err := p.r1.PublishHeartbeat(onBeat, marshal(t, &msgs.Heartbeat{Header: header("r1", 0), NewestNumber: 1 << 40})); err != nil {
		t.Fatal(err)
	}
	counted(t, p.base.Refused,
		door.Count{Source: "r1", Kind: "hb", Reason: door.Unsigned, N: 1},
		door.Count{Source: "r1", Kind: "summary", Reason: door.Forged, N: 1},
		door.Count{Source: "r1", Kind: "summary", Reason: door.Unsigned, N: 1},
		door.Count{Source: "r1", Kind: "summary", Reason: door.Unwanted, N: 1},
		door.Count{Source: "r1", Kind: "tie", Reason: door.Forged, N: 5},
		door.Count{Source: "r1", Kind: "tie", Reason: door.Malformed, N: 4},
		door.Count{Source: "r1", Kind: "tie", Reason: door.Newer, N: 1},
		door.Count{Source: "r1", Kind: "tie", Reason: door.Unsigned, N: 2},
		door.Count{Source: "r1", Kind: "tie", Reason: door.Unwanted, N: 2},
	)
	p.say(t, p.r1, "r1", msgs.KindTie, "again", tie(t, 1)) // a record that was there before
	p.say(t, p.r1, "r1", msgs.KindSummary, "", summary(t, "r1", 1, 3))
	p.rest(t, 1)
	if after := p.state(t); after != before {
		t.Errorf("the map changed from\n%s\nto\n%s", before, after)
	}
	p.say(t, p.r1, "r1", msgs.KindTie, "f.r1.2", tie(t, 2)) // and it goes on
	p.rest(t, 2)
}

// A large summary is signed as a whole and in its chunks, so that chunks of others cannot get in the way of it.
func TestLargeSummariesAreSigned(t *testing.T) {
	p := play(t)
	r1, r2 := p.robots["r1"], p.robots["r2"]
	const own = "up.f.r1.summary"
	send := func(version uint64, slot msgs.Slot, whole []byte, by msgs.Signer) {
		t.Helper()
		chunks, head, err := msgs.Split(whole, version, slot)
		if err != nil {
			t.Fatal(err)
		}
		for n, c := range chunks {
			subject := msgs.ChunkSubject("f", "r1", slot, n)
			publish(t, p.r1, subject, "", sign(t, subject, c, by))
		}
		subject := msgs.HeadSubject("f", "r1")
		publish(t, p.r1, subject, "", sign(t, subject, head, by))
	}
	large := summary(t, "r1", 3, 6000)
	if len(large) <= msgs.ChunkAbove {
		t.Fatalf("a summary of %d bytes is no test", len(large))
	}
	send(1<<60, msgs.SlotB, large, r2)               // by another: would keep every later one out
	send(2, msgs.SlotA, large, r1)                   // the chunks are signed, what they make is not
	send(3, msgs.SlotB, sign(t, own, large, r1), r1) // as it should be
	chunks := uint64((len(large) + msgs.ChunkSize) / msgs.ChunkSize)
	counted(t, p.base.Refused,
		door.Count{Source: "r1", Kind: "summary", Reason: door.Forged, N: chunks + 1},
		door.Count{Source: "r1", Kind: "summary", Reason: door.Unsigned, N: 1},
	)
	until(t, corrections(t, p.link, "r1"), "answer to the large summary", func(m *msgs.Correction) bool { return m.SummaryVersion == 3 })
}

// An id that r1 has used in its own stream does not keep a record of r2 out.
func TestAnIDOfAnotherKeepsNothingOut(t *testing.T) {
	p := play(t)
	link := p.dial(t, "r2")
	const id = "f.r2.02000000000000000000000000000000.1"
	publish(t, p.r1, "up.f.r1.tie", id, sign(t, "up.f.r1.tie", tie(t, 2), p.robots["r1"]))
	duplicate, err := link.Publish(deadline(t), "up.f.r2.tie", id, []byte("the first of r2"))
	if err != nil || duplicate {
		t.Errorf("duplicate %v, %v", duplicate, err)
	}
	p.rest(t, 2)
	counted(t, p.base.Refused, door.Count{Source: "r2", Kind: "tie", Reason: door.Malformed, N: 1})
}

// Reply subjects: acknowledgements and corrections of its own are put by r1 where others listen. Base and r2 count them, the map stays,
// the base keeps its lease, and what was displaced comes again.
func TestRepliesInTheWrongPlaceHaveNoEffect(t *testing.T) {
	p := play(t)
	before := p.state(t)
	corr := "$JS.API.DIRECT.GET." + bus.CorrectionStream("f") + ".down.f.r1.corr"
	next := "$JS.API.CONSUMER.MSG.NEXT." + bus.VerdictStream("f") + ".r1"
	ask := func(subject, reply string, body []byte) {
		t.Helper()
		if err := p.raw.PublishRequest(subject, reply, body); err != nil {
			t.Fatal(err)
		}
	}
	acknowledged := sign(t, "up.f.r1.tie", tie(t, 1), p.robots["r1"])
	for _, reply := range []string{"up.f.r2.tie", "up.f.r2.summary", "up.f.r2.summary.head", "up.f.r2.summary.a.0", "up.f.r2.hb"} {
		ask("up.f.r1.tie", reply, acknowledged)
		ask(corr, reply, nil)
	}
	ask(next, "up.f.r2.hb", []byte("1")) // comes as what it is, a verdict for r1
	// The correction bears the condition on the lease under which it was published, which no other stream can meet.
	counted(t, p.base.Refused,
		door.Count{Source: door.Base, Kind: "verdict", Reason: door.Unwanted, N: 1},
		door.Count{Source: "r2", Kind: "hb", Reason: door.Forged, N: 1}, door.Count{Source: "r2", Kind: "hb", Reason: door.Malformed, N: 1},
		door.Count{Source: "r2", Kind: "summary", Reason: door.Malformed, N: 3},
		door.Count{Source: "r2", Kind: "tie", Reason: door.Malformed, N: 1},
	)

	refuses := func(kind string, reason door.Reason) {
		t.Helper()
		poll(t, func() string { // how often is not known: of messages that come fast r2 hears the newest
			for _, c := range p.r2.Refused() {
				if c.Source == door.Base && c.Kind == kind && c.Reason == reason {
					return ""
				}
			}
			return fmt.Sprintf("r2 did not refuse %s, %s: %v", kind, reason, p.r2.Refused())
		})
	}
	for _, kind := range []string{"corr", "want"} {
		ask("up.f.r1.tie", "down.f.r2."+kind, acknowledged)
		refuses(kind, door.Malformed)
		ask(corr, "down.f.r2."+kind, nil)
		refuses(kind, door.Forged)
	}

	rubbish := make(chan []byte, 1000)
	stop, err := p.link.Subscribe("down.f._lease", func(subject string, b []byte) {
		if msgs.Verify(subject, 0, b, p.ring) != nil {
			rubbish <- b
		}
	})
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	ask("up.f.r1.tie", "down.f._lease", acknowledged)
	until(t, rubbish, "acknowledgement on the lease", func([]byte) bool { return true })
	ask(corr, "down.f._lease", nil)
	until(t, rubbish, "correction on the lease", func([]byte) bool { return true })
	poll(t, func() string { // until it is renewed over what r1 has put there
		b, _, err := p.link.Newest(deadline(t), bus.CorrectionStream("f"), "down.f._lease")
		if err == nil {
			err = msgs.Verify("down.f._lease", 0, b, p.ring)
		}
		if err != nil {
			return fmt.Sprintf("the lease is %q: %v", b, err)
		}
		return ""
	})
	if after := p.state(t); after != before {
		t.Errorf("the map changed from\n%s\nto\n%s", before, after)
	}
	p.say(t, p.r1, "r1", msgs.KindTie, "f.r1.2", tie(t, 2))
	p.rest(t, 2)
	if len(p.term.terms) > 0 {
		t.Errorf("the base lost its lease to a reply")
	}
}

// What a robot had measured when its key was revoked stays; what comes later does not count, and it cannot connect any more.
func TestARevokedRobotIsHeardUpToThen(t *testing.T) {
	p := play(t)
	p.term.stop()
	if err := enrol.Revoke(p.folder, "f", []string{"r1"}, time.Now()); err != nil {
		t.Fatal(err)
	}
	p.read(t)
	if err := p.server.SetRobots(p.roster.Good()); err != nil {
		t.Fatal(err)
	}
	poll(t, func() string {
		if p.raw.IsConnected() {
			return "r1 is still connected"
		}
		return ""
	})
	// Its other connection may learn of it later than the raw one: until then nobody answers what it publishes.
	poll(t, func() string {
		_, err := p.r1.Publish(deadline(t), "up.f.r1.tie", "late", sign(t, "up.f.r1.tie", tie(t, 3), p.robots["r1"]))
		switch {
		case err == nil:
			t.Fatal("published after the key was revoked")
		case !errors.Is(err, nats.ErrDisconnected):
			return fmt.Sprintf("published after the key was revoked: %v", err)
		}
		return ""
	})
	// However it came there.
	publish(t, p.link, "up.f.r1.tie", "late", sign(t, "up.f.r1.tie", tie(t, 3), p.robots["r1"]))
	p.base, p.term = p.lead(t)
	counted(t, p.base.Refused, door.Count{Source: "r1", Kind: "tie", Reason: door.Revoked, N: 1})
	p.rest(t, 1)
}
