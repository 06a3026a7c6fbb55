package shell

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"strings"
	"testing"
	"time"

	"go.uber.org/goleak"

	"selvage/agent"
	"selvage/internal/bus"
	"selvage/internal/lie"
	"selvage/msgs"
)

func TestMain(m *testing.M) {
	if os.Getenv(childDir) != "" {
		if err := child(); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
		return
	}
	goleak.VerifyTestMain(m)
}

const patience = 20 * time.Second

var journal = msgs.JournalID{7}

func serve(t *testing.T, o bus.Options) *bus.Server {
	t.Helper()
	if o.StoreDir == "" {
		o.StoreDir = t.TempDir()
	}
	s, err := bus.Start(o)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.Close() })
	return s
}

// asBase returns the base's connection to a server whose streams are made.
func asBase(t *testing.T, ctx context.Context, s *bus.Server) *bus.Client {
	t.Helper()
	c, err := s.Connect(bus.ClientOptions{Name: "base"})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	if err := c.Prepare(ctx, "f", "r1"); err != nil {
		t.Fatal(err)
	}
	return c
}

// run starts an agent on a link and returns it with what it warns of; it is stopped at the end of the test.
func run(t *testing.T, link *bus.Client) (*Shell, <-chan error) {
	t.Helper()
	c := agent.DefaultConfig("f", "r1", 2)
	c.Journal, c.PublishNS, c.SettleNS, c.RetryNS, c.HeartbeatNS = journal, 1e6, 1e6, 1e8, 1e8
	warnings := make(chan error, 1000)
	s := New(agent.New(c), link, Options{Fleet: "f", Robot: "r1", Tick: 5 * time.Millisecond, Warn: func(err error) { warnings <- err }})
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan struct{})
	go func() { s.Run(ctx); close(ended) }()
	t.Cleanup(func() {
		cancel()
		<-ended
		if err := s.Do(context.Background(), func(*agent.Agent) {}); !errors.Is(err, ErrStopped) {
			t.Errorf("a stopped shell answers %v", err)
		}
		link.Close()
	})
	return s, warnings
}

func deadline(t *testing.T) context.Context {
	ctx, cancel := context.WithTimeout(context.Background(), patience)
	t.Cleanup(cancel)
	return ctx
}

// survey is a track of three keyframes and as many ties to r2 as wanted.
func survey(ties int) []agent.Event {
	var info [36]float64
	for _, i := range [3]int{0, 1, 5} {
		info[7*i] = 100
	}
	step := lie.SE3{R: lie.Identity().R, T: [3]float64{1, 0, 0}}
	pose := lie.Identity()
	var out []agent.Event
	for k := range int64(3) {
		out = append(out, agent.Keyframe{Session: 1, ID: k, StampNS: k * 1e9, Pose: pose})
		pose = pose.Mul(step)
		if k > 0 {
			out = append(out, agent.Relative{Session: 1, From: k - 1, To: k, Z: step, Info: info})
		}
	}
	for k := range ties {
		out = append(out, agent.Tie{
			From: msgs.KeyRef{Robot: "r1", Session: 1, ID: int64(k % 3)}, To: msgs.KeyRef{Robot: "r2", Session: 1, ID: int64(k)},
			Z: step, Info: info, Source: "lidar",
		})
	}
	return out
}

// until waits for a message on a subject that ok is content with.
func until[T any](t *testing.T, from <-chan T, what string, ok func(T) bool) T {
	t.Helper()
	late := time.After(patience)
	for {
		select {
		case x := <-from:
			if ok(x) {
				return x
			}
		case <-late:
			t.Fatalf("no %s came", what)
		}
	}
}

func ties(t *testing.T, base *bus.Client) <-chan *msgs.Tie {
	t.Helper()
	out := make(chan *msgs.Tie, 1000)
	stop, _, err := base.Replay(deadline(t), bus.TieStream("f", "r1"), func(_ string, _ int64, b []byte) {
		m, err := msgs.DecodeTie(b)
		if err != nil {
			t.Error(err)
			return
		}
		out <- m
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(stop)
	return out
}

// TestWhatTheLinkLosesComesLater measures while there is no base, lets the base come, go and come back.
func TestWhatTheLinkLosesComesLater(t *testing.T) {
	ctx, dir := deadline(t), t.TempDir()
	first, err := bus.Start(bus.Options{Listen: "127.0.0.1:0", StoreDir: t.TempDir()})
	if err != nil {
		t.Fatal(err)
	}
	url := first.URL()
	first.Close() // the address is known, nobody listens

	link, err := bus.Dial(url, bus.ClientOptions{Name: "r1"})
	if err != nil {
		t.Fatal(err)
	}
	s, warnings := run(t, link)
	if err := s.Measure(ctx, survey(40)...); err != nil {
		t.Fatal(err)
	}
	until(t, warnings, "warning of a link that is down", func(err error) bool { return strings.Contains(err.Error(), "publish") })
	if s.Sent() {
		t.Error("all is sent though nobody listens")
	}

	second, err := bus.Start(bus.Options{Listen: strings.TrimPrefix(url, "nats://"), StoreDir: dir})
	if err != nil {
		t.Fatal(err)
	}
	got := ties(t, asBase(t, ctx, second))
	seen := map[uint64]bool{}
	until(t, got, "tie 1 to 40", func(m *msgs.Tie) bool {
		seen[m.Header.Number] = true
		return len(seen) == 40
	})
	second.Close()
	if err := s.Measure(ctx, survey(0)[0]); err == nil {
		t.Error("a keyframe that came twice was taken")
	}
	if err := s.Measure(ctx, survey(50)[5+40:]...); err != nil {
		t.Fatal(err)
	}
	third := serve(t, bus.Options{Listen: strings.TrimPrefix(url, "nats://"), StoreDir: dir})
	base := asBase(t, ctx, third)
	seen = map[uint64]bool{}
	until(t, ties(t, base), "tie 1 to 50", func(m *msgs.Tie) bool {
		if seen[m.Header.Number] {
			t.Errorf("tie %d is stored twice", m.Header.Number)
		}
		seen[m.Header.Number] = true
		return len(seen) == 50
	})
	if n := s.Traffic(); n.Summaries < 1 || n.LargestSummary == 0 || n.Up < n.LargestSummary || n.Messages < 51 {
		t.Errorf("traffic %+v", n)
	}
}

// TestTheBaseIsHeard publishes a want before the agent is there, and one that is for somebody else.
func TestTheBaseIsHeard(t *testing.T) {
	ctx, server := deadline(t), serve(t, bus.Options{})
	base := asBase(t, ctx, server)
	want := func(robot string, safe uint64) {
		b, err := (&msgs.Want{Fleet: "f", Robot: robot, Epoch: msgs.Epoch{Incarnation: 5}, Term: 1, Journal: journal, Safe: safe}).Marshal()
		if err == nil {
			err = base.PublishNewest(ctx, msgs.DownSubject("f", "r1", msgs.KindWant), b)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	want("r1", 1)
	beats := make(chan *msgs.Heartbeat, 1000)
	stop, err := base.Subscribe(msgs.UpSubject("f", "r1", msgs.KindHeartbeat), func(_ string, b []byte) {
		if h, err := msgs.DecodeHeartbeat(b); err == nil {
			beats <- h
		}
	})
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	link, err := server.Connect(bus.ClientOptions{Name: "r1"})
	if err != nil {
		t.Fatal(err)
	}
	s, warnings := run(t, link)
	until(t, beats, "heartbeat that knows the base", func(h *msgs.Heartbeat) bool { return h.HighestIncarnation == 5 })
	if err := s.Measure(ctx, survey(2)...); err != nil {
		t.Fatal(err)
	}
	want("r2", 2)
	until(t, warnings, "refusal", func(err error) bool { return strings.Contains(err.Error(), "down.f.r1.want: message for r2") })
	verdict, err := (&msgs.Verdict{Fleet: "f", Robot: "r1", Tie: "x", Verdict: msgs.Held, Epoch: msgs.Epoch{Incarnation: 5, Number: 1}, Term: 1}).Marshal()
	if err != nil {
		t.Fatal(err)
	}
	heard := s.Traffic().Down
	if _, err := base.Publish(ctx, msgs.DownSubject("f", "r1", msgs.KindVerdict), "v1", verdict); err != nil {
		t.Fatal(err)
	}
	size := len(verdict) + len(msgs.DownSubject("f", "r1", msgs.KindVerdict))
	until(t, beats, "verdict", func(*msgs.Heartbeat) bool { return s.Traffic().Down == heard+size })
}

// TestLargeSummariesGoInChunks sends three and looks at what the base can read after each.
func TestLargeSummariesGoInChunks(t *testing.T) {
	ctx, server := deadline(t), serve(t, bus.Options{})
	base := asBase(t, ctx, server)
	link, err := server.Connect(bus.ClientOptions{Name: "r1"})
	if err != nil {
		t.Fatal(err)
	}
	s, _ := run(t, link)
	var pieces msgs.Assembler
	whole := make(chan []byte, 10)
	stop, _, err := base.Replay(ctx, bus.SummaryStream("f"), func(subject string, _ int64, b []byte) {
		at, err := msgs.ParseSubject(subject)
		if err != nil {
			t.Error(err)
			return
		}
		if b, err = pieces.Accept(at, b); err != nil {
			t.Error(err)
		} else if b != nil {
			whole <- b
		}
	})
	if err != nil {
		t.Fatal(err)
	}
	defer stop()
	rng := rand.New(rand.NewPCG(1, 2))
	for version, size := range []int{msgs.ChunkAbove + 1, msgs.ChunkAbove + 100_000, msgs.ChunkAbove, 10 * msgs.ChunkAbove} {
		payload := make([]byte, size)
		for i := range payload {
			payload[i] = byte(rng.Uint32())
		}
		slot := s.slot
		p := agent.Publish{Kind: msgs.KindSummary, Payload: payload, Number: uint64(version + 1)}
		if err := s.send(ctx, laneOf(&p), p); err != nil {
			t.Fatal(err)
		}
		if got := until(t, whole, "summary", func([]byte) bool { return true }); !bytes.Equal(got, payload) {
			t.Errorf("summary of %d bytes came as other %d bytes", size, len(got))
		}
		if moved := s.slot != slot; moved != (size > msgs.ChunkAbove) {
			t.Errorf("summary of %d bytes: slot %s after %s", size, s.slot, slot)
		}
	}
	if n := s.Traffic(); n.LargestSummary < 10*msgs.ChunkAbove || n.LargestSummary > 11*msgs.ChunkAbove || n.Summaries != 4 {
		t.Errorf("traffic %+v", n)
	}
	short, cancel := context.WithCancel(ctx)
	cancel()
	slot := s.slot
	p := agent.Publish{Kind: msgs.KindSummary, Payload: make([]byte, msgs.ChunkAbove+1), Number: 9}
	if err := s.send(short, laneOf(&p), p); err == nil || s.slot != slot {
		t.Errorf("a summary that was not sent: error %v, slot %s after %s", err, s.slot, slot)
	}
}
