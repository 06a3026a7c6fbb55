// Package shell runs the core of a coordinator at the base: it owns the bus, the clock and the goroutines that the core knows
// nothing of.
//
//	bus --ties, summaries, heartbeats--> owner goroutine --effects--> outbox --> bus
//	                                       ^--ticker
//
// One goroutine, the owner, touches the core. It never waits for the bus: what the core publishes goes into an outbox, where a
// newer correction, want or verdict takes the place of an older one of the same robot or tie that is not sent yet.
//
// Ties are read from the beginning of their streams, and of summaries the newest that are kept, each time the shell starts: the
// streams are the memory of the base, and a coordinator that was killed comes back to what it knew. The core drops what it has seen.
//
// [Lead] runs one shell after another: it waits for the lease of the fleet, speaks while that lasts, and waits again. What a
// coordinator sends after it has lost the lease is refused by the server, and what a robot has from a later term is never replaced.
//
// The shell signs what it sends, and the core hears nothing that its robot has not signed.
package shell

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"slices"
	"sync"
	"time"

	"selvage/coordinator"
	"selvage/internal/bus"
	"selvage/internal/door"
	"selvage/msgs"
)

// ErrStopped means that the shell does not run any more.
var ErrStopped = errors.New("the coordinator has stopped")

// Options say for whom a coordinator speaks.
type Options struct {
	Fleet  string        // as in the configuration of the core
	Robots []string      // whose streams are made and read; others are not heard
	Tick   time.Duration // how often the core is told the time
	Warn   func(error)   // told of what was refused and of what could not be sent; called from several goroutines

	Lease *bus.Lease // under which it publishes; nil where nobody else can speak for the fleet

	Signer   msgs.Signer   // signs what the base sends; nil in a fleet that does not sign
	Verifier msgs.Verifier // knows the keys of the robots; nil in a fleet that does not sign
}

// Shell runs one coordinator.
type Shell struct {
	core    *coordinator.Coordinator
	link    *bus.Client
	options Options
	begin   time.Time
	calls   chan func()
	stopped chan struct{}
	door    *door.Door
	out     *bus.Outbox[lane, coordinator.Publish]
	heard   map[string]int64 // the owner's: when the newest message of each robot came to the bus
}

// New makes a shell around a core. Until Run has returned the core belongs to the shell.
func New(core *coordinator.Coordinator, link *bus.Client, o Options) *Shell {
	o.Robots = slices.Clone(o.Robots)
	s := &Shell{
		core: core, link: link, options: o, begin: time.Now(), calls: make(chan func()), stopped: make(chan struct{}), heard: map[string]int64{},
	}
	s.door = door.New(o.Fleet, o.Robots, o.Verifier, o.Warn)
	s.out = bus.NewOutbox(s.send, o.Warn)
	return s
}

// Run makes the streams of the fleet and runs the coordinator until ctx ends. It returns an error when it could not begin, and
// waits for all that it started. It can be called once.
func (s *Shell) Run(ctx context.Context) error {
	var wait sync.WaitGroup
	defer wait.Wait()
	defer close(s.stopped)
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	if err := s.link.Prepare(ctx, s.options.Fleet, s.options.Robots...); err != nil {
		return err
	}
	began := make(chan error, 1)
	wait.Go(func() { s.out.Run(ctx, workers) })
	wait.Go(func() { s.listen(ctx, began) })
	ticker := time.NewTicker(s.options.Tick)
	defer ticker.Stop()
	var tick <-chan time.Time // nil until the core knows what the streams hold: a solution of half of it would be worse than the last one
	for {
		select {
		case <-ctx.Done():
			return nil
		case err := <-began:
			if err != nil && ctx.Err() == nil {
				return err
			}
			tick = ticker.C
		case call := <-s.calls:
			call()
		case <-tick:
			s.tick()
		}
	}
}

// tick tells the core the time and puts what it publishes into the outbox. Only the owner calls it.
func (s *Shell) tick() {
	out, err := s.core.Tick(s.now())
	if err != nil {
		s.options.Warn(fmt.Errorf("tick: %w", err))
	}
	for _, p := range out {
		to, err := laneOf(&p)
		if err != nil {
			s.options.Warn(err)
			continue
		}
		s.out.Put(to, p)
	}
}

// now is the time of day when the shell was made plus what has passed since: it never goes back.
func (s *Shell) now() int64 { return s.begin.UnixNano() + int64(time.Since(s.begin)) }

// Do lets f look at the core while nobody else touches it. What f keeps of it must be a copy.
func (s *Shell) Do(ctx context.Context, f func(*coordinator.Coordinator)) error {
	return s.call(ctx, func() { f(s.core) })
}

// Heard returns when the newest message of each robot that the core took came to the bus, nanoseconds on the clock of the base.
func (s *Shell) Heard(ctx context.Context) (heard map[string]int64, err error) {
	err = s.call(ctx, func() { heard = maps.Clone(s.heard) })
	return heard, err
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

// Refused returns how many messages were not heard, and why.
func (s *Shell) Refused() []door.Count { return s.door.Counts() }

// Sent tells whether the outbox is empty.
func (s *Shell) Sent() bool { return s.out.Empty() }
