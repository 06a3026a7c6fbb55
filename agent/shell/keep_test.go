package shell

import (
	"context"
	"errors"
	"strings"
	"testing"
	"time"

	"selvage/agent"
	"selvage/agent/record"
	"selvage/internal/bus"
	disks "selvage/internal/journal"
	"selvage/msgs"
)

// runKept starts an agent whose journal is on a disk, and returns it with what it warns of and what stops it.
func runKept(t *testing.T, link *bus.Client, disk *disks.Memory) (*Shell, <-chan error, func()) {
	t.Helper()
	c := agent.DefaultConfig("f", "r1", 2)
	c.Journal, c.PublishNS, c.SettleNS, c.RetryNS, c.HeartbeatNS = journal, 1e6, 1e6, 1e12, 1e8
	store, core, err := record.Open(disk, c)
	if err != nil {
		t.Fatal(err)
	}
	warnings := make(chan error, 1000)
	s := New(core, link, Options{Fleet: "f", Robot: "r1", Tick: 5 * time.Millisecond, Store: store, Warn: func(err error) { warnings <- err }})
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan struct{})
	go func() { s.Run(ctx); close(ended) }()
	stop := func() {
		cancel()
		<-ended
		link.Close()
	}
	t.Cleanup(stop)
	return s, warnings, stop
}

// TestNothingLeavesBeforeItIsDurable measures on a disk that does not take it.
func TestNothingLeavesBeforeItIsDurable(t *testing.T) {
	ctx, server := deadline(t), serve(t, bus.Options{})
	base := asBase(t, ctx, server)
	link, err := server.Connect(bus.ClientOptions{Name: "r1"})
	if err != nil {
		t.Fatal(err)
	}
	disk := disks.NewMemory(1)
	disk.SetFaults(disks.Faults{Sync: 1})
	s, warnings, _ := runKept(t, link, disk)
	measured := make(chan error, 1)
	go func() { measured <- s.Measure(ctx, survey(3)...) }()
	until(t, warnings, "warning of the disk", func(err error) bool {
		return errors.Is(err, disks.ErrFault) && strings.Contains(err.Error(), "nothing is sent until this works")
	})
	for { // the events are handled, whatever the disk does
		var n int
		if err := s.Do(ctx, func(a *agent.Agent) { n = len(a.Tracks()) }); err != nil {
			t.Fatal(err)
		}
		if n > 0 {
			break
		}
	}
	select {
	case err := <-measured:
		t.Fatalf("measured before it was durable: %v", err)
	default:
	}
	if s.Sent() || !s.out.Empty() || s.Traffic().Messages > 0 {
		t.Errorf("something left the robot before it was durable: %+v", s.Traffic())
	}
	disk.SetFaults(disks.Faults{})
	if err := <-measured; err != nil {
		t.Fatal(err)
	}
	seen := map[uint64]bool{}
	until(t, ties(t, base), "tie 1 to 3", func(m *msgs.Tie) bool {
		seen[m.Header.Number] = true
		return len(seen) == 3
	})
	if n, err := s.Take(ctx, survey(0)[0]); n != 0 || err == nil || !strings.Contains(err.Error(), "came twice") {
		t.Errorf("a keyframe that came twice: %d taken, %v", n, err)
	}
}

// TestAgentOutlivesItsProcess cuts the power of a robot: what was measured is known to the next process, its ties go on with the
// next number, and its summaries with the next version.
func TestAgentOutlivesItsProcess(t *testing.T) {
	ctx, server := deadline(t), serve(t, bus.Options{})
	base := asBase(t, ctx, server)
	got := ties(t, base)
	summaries := make(chan *msgs.Summary, 1000)
	stopReading, _, err := base.Replay(ctx, bus.SummaryStream("f"), func(_ string, _ int64, b []byte) {
		m, err := msgs.DecodeSummary(b)
		if err != nil {
			t.Error(err)
			return
		}
		summaries <- m
	})
	if err != nil {
		t.Fatal(err)
	}
	defer stopReading()
	disk := disks.NewMemory(1)
	all := survey(40)
	var newest uint64 // version of a summary
	seen := map[uint64]bool{}
	for life := range 3 {
		link, err := server.Connect(bus.ClientOptions{Name: "r1"})
		if err != nil {
			t.Fatal(err)
		}
		s, _, stop := runKept(t, link, disk)
		part := all[:5+10]
		if life > 0 {
			part = all[5+10*life : 5+10*(life+1)]
		}
		if err := s.Measure(ctx, part...); err != nil {
			t.Fatalf("life %d: %v", life, err)
		}
		until(t, got, "the ties of this life", func(m *msgs.Tie) bool {
			if seen[m.Header.Number] {
				t.Errorf("tie %d twice", m.Header.Number)
			}
			seen[m.Header.Number] = true
			return len(seen) == 10*(life+1)
		})
		if !seen[uint64(10*(life+1))] {
			t.Fatalf("life %d: numbers %v", life, seen)
		}
		before := newest
		until(t, summaries, "a newer summary", func(m *msgs.Summary) bool {
			if m.Version <= newest {
				t.Errorf("summary %d after %d", m.Version, newest)
			}
			newest = m.Version
			return m.Version > before
		})
		stop()
		disk = disk.PowerCut()
	}
}
