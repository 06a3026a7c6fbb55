// Package shell runs the core of an agent on a robot: it owns the bus, the clock and the goroutines that the core knows nothing
// of.
//
//	front end --Measure--> owner goroutine --effects--> journal --> outbox --> bus
//	bus --want, correction, verdict--^   ^--ticker
//
// One goroutine, the owner, touches the core. It never waits for the bus: what the core publishes goes into an outbox, where a
// newer summary or heartbeat takes the place of an older one that is not sent yet, and ties wait side by side. What cannot be sent
// is sent again when the link is back, and the core itself repeats what stays unanswered.
//
// With a [record.Store] what the front end tells is kept: nothing leaves the robot before the disk has what it came of, and what
// was measured counts as taken when it is durable. One wait for the disk serves all that came meanwhile.
//
// The shell signs what it sends, and the core hears nothing that the base has not signed.
//
// A summary of more than 256 kB goes as chunks, one at a time, into two slots in turn, then the head that says which; heartbeats
// and ties get between.
package shell

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"selvage/agent"
	"selvage/agent/record"
	"selvage/internal/bus"
	"selvage/internal/door"
	"selvage/msgs"
)

// ErrStopped means that the shell does not run any more.
var ErrStopped = errors.New("the agent has stopped")

// Options say where an agent stands on the bus.
type Options struct {
	Fleet, Robot string        // as in the configuration of the core
	Tick         time.Duration // how often the core is told the time
	Store        *record.Store // keeps what the front end tells; the shell's until Run has returned; nil for an agent without a disk
	Warn         func(error)   // told of what was refused and of what could not be sent; called from several goroutines

	Signer   msgs.Signer   // signs what the agent sends; nil in a fleet that does not sign
	Verifier msgs.Verifier // knows the key of the base; nil in a fleet that does not sign
}

// Traffic is what crossed the link so far: bytes of payloads and subjects, up what was sent and down what was heard.
type Traffic struct {
	Up, Down       int
	Messages       int // sent
	Summaries      int // sent
	LargestSummary int // bytes, all chunks together
}

// Shell runs one agent.
type Shell struct {
	core    *agent.Agent
	link    *bus.Client
	options Options
	begin   time.Time
	calls   chan func()
	stopped chan struct{}
	door    *door.Door
	out     *bus.Outbox[lane, agent.Publish]
	keeper  *keeper   // nil without a store
	slot    msgs.Slot // for the next large summary; of the one worker that has it

	mu      sync.Mutex
	traffic Traffic
}

// New makes a shell around a core. Until Run has returned the core belongs to the shell.
func New(core *agent.Agent, link *bus.Client, o Options) *Shell {
	s := &Shell{
		core: core, link: link, options: o, begin: time.Now(), calls: make(chan func()), stopped: make(chan struct{}), slot: msgs.SlotA,
	}
	s.door = door.New(o.Fleet, []string{o.Robot}, o.Verifier, o.Warn)
	s.out = bus.NewOutbox(s.send, o.Warn)
	if o.Store != nil {
		s.keeper = newKeeper(o.Store, s.put, o.Warn)
	}
	return s
}

// Run runs the agent until ctx ends. It waits for all that it started. It can be called once.
func (s *Shell) Run(ctx context.Context) {
	var wait sync.WaitGroup
	defer wait.Wait()
	defer close(s.stopped)
	wait.Go(func() { s.out.Run(ctx, workers) })
	wait.Go(func() { s.listen(ctx) })
	if s.keeper != nil {
		wait.Go(func() { s.keeper.run(ctx) })
	}
	tick := time.NewTicker(s.options.Tick)
	defer tick.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case call := <-s.calls:
			call()
		case <-tick.C:
			if _, err := s.handle(agent.Tick{}); err != nil {
				s.options.Warn(fmt.Errorf("tick: %w", err))
			}
		}
	}
}

// now is the time of day when the shell was made plus what has passed since: it never goes back.
func (s *Shell) now() int64 { return s.begin.UnixNano() + int64(time.Since(s.begin)) }

// handle gives the core an event; what it publishes goes into the outbox, by way of the journal if there is one. Only the owner calls
// it. It returns the number of the newest record.
func (s *Shell) handle(e agent.Event) (record uint64, err error) {
	if s.keeper != nil {
		out, record, err := s.options.Store.Handle(s.now(), e)
		s.keeper.add(out, record)
		return record, err
	}
	out, err := s.core.Handle(s.now(), e)
	for _, p := range out {
		s.put(p)
	}
	return 0, err
}

func (s *Shell) put(p agent.Publish) { s.out.Put(laneOf(&p), p) }

// Measure gives the agent what its front end delivers, in one go, and returns when it is durable. It stops at the first event that is
// refused and says why.
func (s *Shell) Measure(ctx context.Context, events ...agent.Event) error {
	_, err := s.Take(ctx, events...)
	return err
}

// Take is Measure and tells how many events were taken. When it is not all of them and the error is not that of ctx or ErrStopped, the
// next one was refused; those before it are durable.
func (s *Shell) Take(ctx context.Context, events ...agent.Event) (taken int, err error) {
	var refused error
	var newest uint64
	err = s.call(ctx, func() {
		for taken < len(events) && refused == nil {
			if newest, refused = s.handle(events[taken]); refused == nil {
				taken++
			}
		}
	})
	if err == nil && s.keeper != nil {
		err = s.keeper.wait(ctx, newest, s.stopped)
	}
	if err != nil {
		return 0, err
	}
	return taken, refused
}

// Do lets f look at the core while nobody else touches it. What f keeps of it must be a copy.
func (s *Shell) Do(ctx context.Context, f func(*agent.Agent)) error {
	return s.call(ctx, func() { f(s.core) })
}

// call lets the owner run f and waits for it.
func (s *Shell) call(ctx context.Context, f func()) error {
	done := make(chan struct{})
	select {
	case s.calls <- func() { defer close(done); f() }:
		<-done
		return nil
	case <-s.stopped:
		return ErrStopped
	case <-ctx.Done():
		return ctx.Err()
	}
}

// Sent tells whether nothing waits to be sent.
func (s *Shell) Sent() bool { return (s.keeper == nil || s.keeper.empty()) && s.out.Empty() }

// Refused returns how many messages were not heard, and why.
func (s *Shell) Refused() []door.Count { return s.door.Counts() }

// Traffic returns what crossed the link so far.
func (s *Shell) Traffic() Traffic {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.traffic
}
