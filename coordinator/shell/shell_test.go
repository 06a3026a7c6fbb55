package shell

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"testing"
	"time"

	"go.uber.org/goleak"

	"selvage/coordinator"
	"selvage/internal/bus"
	"selvage/msgs"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

const patience = 20 * time.Second

func deadline(t *testing.T) context.Context {
	ctx, cancel := context.WithTimeout(context.Background(), patience)
	t.Cleanup(cancel)
	return ctx
}

func connect(t *testing.T, s *bus.Server, name string) *bus.Client {
	t.Helper()
	c, err := s.Connect(bus.ClientOptions{Name: name})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	return c
}

func serve(t *testing.T) *bus.Server {
	t.Helper()
	s, err := bus.Start(bus.Options{StoreDir: t.TempDir()})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.Close() })
	return s
}

// run starts a coordinator of r1 and r2 that takes every tie as true, and returns how to stop it.
func run(t *testing.T, link *bus.Client, incarnation uint64) (s *Shell, warnings <-chan error, stop func()) {
	t.Helper()
	c := coordinator.DefaultConfig("f", 2)
	c.HoldAll, c.SolveNS, c.PromptNS, c.RetryNS, c.Incarnation = true, 1e7, 1e7, 1e8, incarnation
	told := make(chan error, 1000)
	s = New(coordinator.New(c), link, Options{
		Fleet: "f", Robots: []string{"r1", "r2"}, Tick: 5 * time.Millisecond, Warn: func(err error) { told <- err },
	})
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan error, 1)
	go func() { ended <- s.Run(ctx) }()
	if err := s.Do(deadline(t), func(*coordinator.Coordinator) {}); err != nil {
		t.Fatal(err)
	}
	return s, told, func() {
		cancel()
		if err := <-ended; err != nil {
			t.Error(err)
		}
		if err := s.Do(context.Background(), func(*coordinator.Coordinator) {}); !errors.Is(err, ErrStopped) {
			t.Errorf("a stopped shell answers %v", err)
		}
	}
}

func header(robot string, number uint64) msgs.Header {
	return msgs.Header{Fleet: "f", Robot: robot, Journal: msgs.JournalID{1}, Number: number, Session: 1}
}

// summary is a track of n junctions one metre apart.
func summary(t *testing.T, robot string, version uint64, n int) []byte {
	t.Helper()
	p := msgs.Part{Session: 1, Keyframes: n}
	for k := range n {
		p.Junctions = append(p.Junctions, msgs.Junction{ID: int64(k), Pose: msgs.Pose{T: [3]float64{float64(k)}, Q: [4]float64{3: 1}}})
		if k > 0 {
			p.Cliques = append(p.Cliques, msgs.Clique{Nodes: []int{k - 1, k}, H: []float64{100, 0, 0, 0, 100, 0, 0, 0, 100}, B: make([]float64, 3)})
		}
	}
	return marshal(t, &msgs.Summary{Header: header(robot, 0), Version: version, Dim: 3, Parts: []msgs.Part{p}})
}

func tie(t *testing.T, number uint64) []byte {
	t.Helper()
	return marshal(t, &msgs.Tie{
		Header: header("r1", number), ID: fmt.Sprintf("tie%d", number), From: msgs.KeyRef{Robot: "r1", Session: 1}, To: msgs.KeyRef{Robot: "r2", Session: 1},
		Pose: msgs.Pose{T: [3]float64{0, 2, 0}, Q: [4]float64{3: 1}}, Info: []float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, Dim: 3,
	})
}

func marshal(t *testing.T, m interface{ Marshal() ([]byte, error) }) []byte {
	t.Helper()
	b, err := m.Marshal()
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func publish(t *testing.T, c *bus.Client, subject, id string, payload []byte) {
	t.Helper()
	ctx := deadline(t)
	var err error
	if id == "" {
		err = c.PublishNewest(ctx, subject, payload)
	} else {
		_, err = c.Publish(ctx, subject, id, payload)
	}
	if err != nil {
		t.Fatal(err)
	}
}

// corrections follows what a robot is told.
func corrections(t *testing.T, c *bus.Client, robot string) <-chan *msgs.Correction {
	t.Helper()
	out := make(chan *msgs.Correction, 1000)
	stop, err := c.Follow(bus.CorrectionStream("f"), msgs.DownSubject("f", robot, msgs.KindCorrection), func(_ string, b []byte) {
		m, err := msgs.DecodeCorrection(b)
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

func joined(m *msgs.Correction) bool { return m.Parts[0].Joined }

// TestLargeSummariesArePutTogether publishes one in chunks, out of order, while an older one stands whole.
func TestLargeSummariesArePutTogether(t *testing.T) {
	server := serve(t)
	base, r1 := connect(t, server, "base"), connect(t, server, "r1")
	_, _, stop := run(t, base, 1)
	defer stop()
	publish(t, r1, "up.f.r1.summary", "", summary(t, "r1", 1, 1))
	const n = 6000
	large := summary(t, "r1", 2, n)
	if len(large) <= msgs.ChunkAbove {
		t.Fatalf("a summary of %d bytes is no test", len(large))
	}
	chunks, head, err := msgs.Split(large, 2, msgs.SlotB)
	if err != nil {
		t.Fatal(err)
	}
	publish(t, r1, msgs.HeadSubject("f", "r1"), "", head)
	for k := len(chunks) - 1; k >= 0; k-- {
		publish(t, r1, msgs.ChunkSubject("f", "r1", msgs.SlotB, k), "", chunks[k])
	}
	// Alone, r1 has no place in a datum: the correction says so, and which summary it answers.
	m := until(t, corrections(t, r1, "r1"), "answer to the large summary", func(m *msgs.Correction) bool { return m.SummaryVersion == 2 })
	if joined(m) {
		t.Error("a robot alone is joined")
	}
}

func TestWhatIsWrongIsRefusedAndTold(t *testing.T) {
	server := serve(t)
	base, r1 := connect(t, server, "base"), connect(t, server, "r1")
	s, warnings, stop := run(t, base, 1)
	defer stop()
	for _, x := range []struct {
		subject, id, want string
		payload           []byte
	}{
		{"up.f.r9.summary", "", "a robot that is not of the fleet", summary(t, "r9", 1, 1)},
		{"up.f.r1.summary", "", "message of r2 of fleet f came as r1", summary(t, "r2", 1, 1)},
		{"up.f.r1.summary.c.0", "", "up.f.r1.summary.c.0", []byte{1}},
		{"up.f.r1.summary.head", "", "up.f.r1.summary.head", []byte{1}},
		{"up.f.r1.tie", "x", "up.f.r1.tie: tie:", []byte("no tie")},
	} {
		publish(t, r1, x.subject, x.id, x.payload)
		until(t, warnings, "warning of "+x.subject, func(err error) bool { return strings.Contains(err.Error(), x.want) })
	}
	if err := r1.PublishHeartbeat("up.f.r1.hb", []byte("no heartbeat")); err != nil {
		t.Fatal(err)
	}
	until(t, warnings, "warning of a heartbeat", func(err error) bool { return strings.Contains(err.Error(), "up.f.r1.hb: hb:") })
	publish(t, r1, "up.f.r1.tie", "y", tie(t, 1)) // and goes on
	publish(t, r1, "up.f.r1.summary", "", summary(t, "r1", 1, 1))
	until(t, corrections(t, r1, "r1"), "correction", func(m *msgs.Correction) bool { return m.SummaryVersion == 1 })
	if err := s.Do(deadline(t), func(c *coordinator.Coordinator) {
		if len(c.Map()) != 1 || len(c.Findings()) != 1 {
			t.Errorf("map %+v, findings %+v", c.Map(), c.Findings())
		}
	}); err != nil {
		t.Error(err)
	}
}

func TestAStreamThatCannotBeMadeStopsIt(t *testing.T) {
	server := serve(t)
	link := connect(t, server, "base")
	c := coordinator.DefaultConfig("f", 2)
	s := New(coordinator.New(c), link, Options{Fleet: "f", Robots: []string{"r.1"}, Tick: time.Second, Warn: func(error) {}})
	if err := s.Run(deadline(t)); err == nil || !strings.Contains(err.Error(), "r.1") {
		t.Errorf("error %v", err)
	}
	if err := s.Do(deadline(t), func(*coordinator.Coordinator) {}); !errors.Is(err, ErrStopped) {
		t.Errorf("afterwards: %v", err)
	}
}
