package shell

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"sync"
	"time"

	"selvage/coordinator"
	"selvage/internal/bus"
	"selvage/msgs"
)

// Leadership says how to become the coordinator that speaks for a fleet.
type Leadership struct {
	Options               // of the shell of each term; Lease is set by [Lead]
	Holder  string        // who it is: 1 to 128 visible ASCII characters, another one in every process
	TTL     time.Duration // how long a lease lasts that is not renewed, at least a second: a standby is that late at least

	// Core makes the core of a term: the configuration says from where it goes on, all else is its maker's.
	Core func(coordinator.Config) *coordinator.Coordinator
	// Leads is told when a term begins, and with nil when it has ended; it may be nil.
	Leads func(term uint64, s *Shell)
}

// Lead waits for the lease, leads, and waits again when the lease is lost, until ctx ends. It returns an error when the bus refuses
// what every coordinator needs.
func Lead(ctx context.Context, link *bus.Client, o Leadership) error {
	if err := link.Prepare(ctx, o.Fleet, o.Robots...); err != nil {
		return err
	}
	valid := func(b []byte) bool {
		if o.Verifier != nil && msgs.Verify(msgs.LeaseSubject(o.Fleet), 0, b, o.Verifier) != nil {
			return false
		}
		m, err := msgs.DecodeLease(b)
		return err == nil && m.Fleet == o.Fleet
	}
	quiet := false // a failure has been told of
	for ctx.Err() == nil {
		lease, err := take(ctx, link, &o, valid)
		switch {
		case errors.Is(err, bus.ErrLeaseHeld):
			quiet = false
		case err != nil && ctx.Err() == nil:
			if !quiet {
				o.Warn(fmt.Errorf("lease: %w", err))
			}
			quiet = true
		case err == nil:
			quiet = false
			if err := lead(ctx, link, &o, lease); err != nil {
				return err
			}
			continue
		}
		rest(ctx, o.TTL/8)
	}
	return nil
}

// rest waits, or until ctx ends.
func rest(ctx context.Context, d time.Duration) {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-ctx.Done():
	case <-t.C:
	}
}

func take(ctx context.Context, link *bus.Client, o *Leadership, valid func([]byte) bool) (*bus.Lease, error) {
	payload, err := o.lease(0, 0)
	if err != nil {
		return nil, err
	}
	return link.TakeLease(ctx, o.Fleet, msgs.LeaseSubject(o.Fleet), payload, o.TTL, valid)
}

// lease writes the message of the lease; the term is 0 until it is known.
func (o *Leadership) lease(term, incarnation uint64) ([]byte, error) {
	m := msgs.Lease{Fleet: o.Fleet, Holder: o.Holder, Term: term, Incarnation: incarnation}
	b, err := m.Marshal()
	if err == nil && o.Signer != nil {
		b, err = msgs.Sign(msgs.LeaseSubject(o.Fleet), b, o.Signer)
	}
	return b, err
}

// lead speaks for the fleet while the lease lasts. Nobody else can publish a correction meanwhile, so what the bus keeps of former terms
// tells which term and epoch follow.
func lead(ctx context.Context, link *bus.Client, o *Leadership, lease *bus.Lease) error {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	var wait sync.WaitGroup
	defer wait.Wait()
	former, err := recall(ctx, link, o)
	if err != nil {
		if ctx.Err() == nil {
			o.Warn(fmt.Errorf("what the bus keeps of former terms: %w", err))
		}
		return nil
	}
	term := former.Term + 1
	payload, err := o.lease(term, former.Incarnation)
	if err != nil {
		return err
	}
	renew := func() bool {
		err := lease.Renew(ctx, payload)
		if err != nil && ctx.Err() == nil {
			o.Warn(fmt.Errorf("term %d: %w", term, err))
		}
		return !errors.Is(err, bus.ErrLeaseLost)
	}
	if !renew() {
		return nil
	}
	former.Term = term
	options := o.Options
	options.Lease = lease
	s := New(o.Core(former), link, options)
	wait.Go(func() {
		defer cancel()
		for ctx.Err() == nil && renew() {
			rest(ctx, o.TTL/4)
		}
	})
	if o.Leads != nil {
		o.Leads(term, s)
		defer o.Leads(term, nil)
	}
	if err := s.Run(ctx); ctx.Err() == nil {
		return err
	}
	return nil
}

// recall reads what former coordinators have published: the configuration of the next one, but for its own term, goes on from there. A
// store that knows none begins with incarnation 1, until a robot reports a higher one.
func recall(ctx context.Context, link *bus.Client, o *Leadership) (c coordinator.Config, err error) {
	highest := msgs.Epoch{Incarnation: 1}
	for _, r := range o.Robots {
		for _, kind := range [2]string{msgs.KindCorrection, msgs.KindWant} {
			subject := msgs.DownSubject(o.Fleet, r, kind)
			b, _, err := link.Newest(ctx, bus.CorrectionStream(o.Fleet), subject)
			if err != nil {
				return c, err
			}
			if b == nil || o.Verifier != nil && msgs.Verify(subject, 0, b, o.Verifier) != nil {
				continue
			}
			// What cannot be read was not applied by any robot either.
			epoch, term := msgs.Epoch{}, uint64(0)
			if kind == msgs.KindWant {
				if m, err := msgs.DecodeWant(b); err == nil {
					epoch, term = m.Epoch, m.Term
				}
			} else if m, err := msgs.DecodeCorrection(b); err == nil {
				epoch, term = m.Epoch, m.Term
			}
			if epoch.Compare(highest) > 0 {
				highest = epoch
			}
			c.Term = max(c.Term, term)
		}
	}
	c.Incarnation, c.Epoch = highest.Incarnation, highest.Number
	c.History, err = history(ctx, link, o)
	return c, err
}

// history reads the verdicts on each tie.
func history(ctx context.Context, link *bus.Client, o *Leadership) (map[coordinator.TieName][]coordinator.Change, error) {
	told := map[coordinator.TieName][]coordinator.Change{}
	var mu sync.Mutex // the reader may hand over more after it has caught up
	stop, caught, err := link.Replay(ctx, bus.VerdictStream(o.Fleet), func(subject string, _ int64, b []byte) {
		if o.Verifier != nil && msgs.Verify(subject, 0, b, o.Verifier) != nil {
			return
		}
		v, err := msgs.DecodeVerdict(b)
		if err != nil || subject != msgs.DownSubject(o.Fleet, v.Robot, msgs.KindVerdict) {
			return
		}
		mu.Lock()
		defer mu.Unlock()
		name := coordinator.TieName{Robot: v.Robot, ID: v.Tie}
		now := coordinator.Change{AtNS: v.StampNS, Epoch: v.Epoch, New: v.Verdict, Reason: v.Reason}
		if n := len(told[name]); n > 0 {
			now.Old = told[name][n-1].New
		}
		told[name] = append(told[name], now)
	})
	if err != nil {
		return nil, err
	}
	defer stop()
	select {
	case <-caught:
	case <-ctx.Done():
		return nil, ctx.Err()
	}
	mu.Lock()
	defer mu.Unlock()
	return maps.Clone(told), nil
}
