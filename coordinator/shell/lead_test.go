package shell

import (
	"context"
	"errors"
	"math"
	"testing"
	"time"

	"selvage/coordinator"
	"selvage/internal/bus"
	"selvage/msgs"
)

// leader is a process that leads or waits for it.
type leader struct {
	t     *testing.T
	terms chan uint64 // 0: it has ended
	shell chan *Shell
	stop  func()
}

func startLeader(t *testing.T, link *bus.Client, holder string) *leader {
	t.Helper()
	return startLeaderOf(t, link, holder, Options{})
}

// startLeaderOf is startLeader in a fleet that signs.
func startLeaderOf(t *testing.T, link *bus.Client, holder string, signs Options) *leader {
	t.Helper()
	l := &leader{t: t, terms: make(chan uint64, 100), shell: make(chan *Shell, 100)}
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan error, 1)
	go func() {
		ended <- Lead(ctx, link, Leadership{
			Options: Options{Fleet: "f", Robots: []string{"r1", "r2"}, Tick: 5 * time.Millisecond, Warn: func(error) {}, Signer: signs.Signer, Verifier: signs.Verifier},
			Holder:  holder, TTL: time.Second,
			Core: func(from coordinator.Config) *coordinator.Coordinator {
				c := coordinator.DefaultConfig("f", 2)
				c.HoldAll, c.SolveNS, c.PromptNS, c.RetryNS = true, 1e7, 1e7, 1e8
				c.Term, c.Incarnation, c.Epoch, c.History = from.Term, from.Incarnation, from.Epoch, from.History
				return coordinator.New(c)
			},
			Leads: func(term uint64, s *Shell) {
				if s == nil {
					term = 0
				} else {
					l.shell <- s
				}
				l.terms <- term
			},
		})
	}()
	done := false
	l.stop = func() {
		if done {
			return
		}
		done = true
		cancel()
		if err := <-ended; err != nil {
			t.Error(err)
		}
	}
	t.Cleanup(l.stop)
	return l
}

func (l *leader) leads() uint64 {
	l.t.Helper()
	return until(l.t, l.terms, "term", func(term uint64) bool { return term > 0 })
}

// A coordinator is stopped without giving the lease back, as by a kill, and another one goes on: under the next term, in the same
// incarnation, with later epochs, and without telling again what robots have been told.
func TestAStandbyGoesOn(t *testing.T) {
	server := serve(t)
	r1, r2 := connect(t, server, "r1"), connect(t, server, "r2")
	first := startLeader(t, connect(t, server, "base"), "base-1")
	if term := first.leads(); term != 1 {
		t.Errorf("first term %d", term)
	}
	second := startLeader(t, connect(t, server, "standby"), "base-2")
	publish(t, r1, "up.f.r1.tie", "a", tie(t, 1))
	publish(t, r1, "up.f.r1.summary", "", summary(t, "r1", 1, 3))
	publish(t, r2, "up.f.r2.summary", "", summary(t, "r2", 1, 2))
	told := corrections(t, r2, "r2")
	m := until(t, told, "correction that joins r2", joined)
	if at := m.Parts[0].DatumFromSession.T; math.Abs(at[0])+math.Abs(at[1]-2)+math.Abs(at[2]) > 1e-12 || m.Term != 1 {
		t.Errorf("r2 stands at %v by term %d, want 0, 2, 0 by 1", at, m.Term)
	}
	verdicts := make(chan *msgs.Verdict, 100)
	end, err := r1.Consume(deadline(t), bus.VerdictStream("f"), "r1", func(_ string, b []byte) error {
		v, err := msgs.DecodeVerdict(b)
		if err == nil {
			verdicts <- v
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	defer end()
	if v := until(t, verdicts, "verdict", func(v *msgs.Verdict) bool { return v.Verdict == msgs.Held }); v.Tie != "tie1" {
		t.Errorf("verdict on %s", v.Tie)
	}
	if len(second.terms) > 0 {
		t.Error("two lead")
	}

	first.stop()
	stopped := time.Now()
	publish(t, r1, "up.f.r1.tie", "b", tie(t, 2)) // while nobody leads
	publish(t, r2, "up.f.r2.summary", "", summary(t, "r2", 2, 4))
	if term := second.leads(); term != 2 {
		t.Errorf("second term %d", term)
	}
	late := time.Since(stopped)
	next := until(t, told, "correction of the second", func(m *msgs.Correction) bool { return m.Term == 2 })
	if next.Epoch.Incarnation != m.Epoch.Incarnation || next.Epoch.Number <= m.Epoch.Number || len(next.Parts[0].IDs) != 4 {
		t.Errorf("epoch %v after %v, %d junctions", next.Epoch, m.Epoch, len(next.Parts[0].IDs))
	}
	if v := until(t, verdicts, "verdict of the second", func(*msgs.Verdict) bool { return true }); v.Tie != "tie2" || v.Term != 2 {
		t.Errorf("the second tells of %s in term %d", v.Tie, v.Term)
	}
	if late > 5*time.Second {
		t.Errorf("%v without a coordinator", late)
	}
	s := <-second.shell
	if err := s.Do(deadline(t), func(c *coordinator.Coordinator) {
		if f := c.Findings(); len(f) != 2 || f[0].Tie != "tie1" || f[1].Tie != "tie2" {
			t.Errorf("ties %+v", f)
		}
		if h := c.History(); len(h[0]) != 1 || h[0][0].Epoch.Number > m.Epoch.Number || len(h[1]) != 1 || h[1][0].Epoch != next.Epoch {
			t.Errorf("history %+v", h)
		}
	}); err != nil {
		t.Error(err)
	}
}

// A leader whose lease was taken from it stops, and what it still has to send is refused.
func TestALeaderThatLosesItsLeaseStops(t *testing.T) {
	server := serve(t)
	base := connect(t, server, "base")
	l := startLeader(t, base, "base-1")
	l.leads()
	s := <-l.shell
	other, err := (&Leadership{Options: Options{Fleet: "f"}, Holder: "base-2"}).lease(7, 1)
	if err != nil {
		t.Fatal(err)
	}
	if err := base.PublishNewest(deadline(t), msgs.LeaseSubject("f"), other); err != nil { // as if it had paused and another had taken it
		t.Fatal(err)
	}
	until(t, l.terms, "end of the term", func(term uint64) bool { return term == 0 })
	if err := s.options.Lease.PublishNewest(deadline(t), msgs.DownSubject("f", "r1", msgs.KindCorrection), []byte("late")); !errors.Is(err, bus.ErrLeaseLost) {
		t.Errorf("after the lease is lost: %v", err)
	}
}

// A robot that has heard of a later base makes this one, whose store is new, speak above it.
func TestAnEmptyStoreSpeaksAboveTheOneBefore(t *testing.T) {
	server := serve(t)
	r1 := connect(t, server, "r1")
	l := startLeader(t, connect(t, server, "base"), "base-1")
	l.leads()
	publish(t, r1, "up.f.r1.summary", "", summary(t, "r1", 1, 3))
	told := corrections(t, r1, "r1")
	until(t, told, "correction", func(m *msgs.Correction) bool { return m.Epoch.Incarnation == 1 })
	beat := marshal(t, &msgs.Heartbeat{Header: header("r1", 0), SummaryVersion: 1, HighestIncarnation: 41, State: "joined"})
	if err := r1.PublishHeartbeat("up.f.r1.hb", beat); err != nil {
		t.Fatal(err)
	}
	until(t, told, "correction above", func(m *msgs.Correction) bool { return m.Epoch.Incarnation == 42 && m.Epoch.Number == 1 })
}
