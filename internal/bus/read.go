package bus

import (
	"context"
	"fmt"
	"sync"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// Handler takes one message. Calls for one subscription, reader or follower come one after the other.
type Handler func(subject string, payload []byte)

// Subscribe hands over what is published on a subject, or a pattern of subjects, from now on. What is published while the
// link is down is missed. Calling stop ends it, though a call under way may still finish. What the server delivers in answer to
// a request that names such a subject for the reply comes too, under the subject it was stored by: look at it.
func (c *Client) Subscribe(pattern string, h Handler) (stop func(), err error) {
	sub, err := c.nc.Subscribe(pattern, func(m *nats.Msg) { h(m.Subject, m.Data) })
	if err != nil {
		return nil, fmt.Errorf("bus: subscribe %s: %w", pattern, err)
	}
	if err := c.flush(); err != nil {
		sub.Unsubscribe()
		return nil, fmt.Errorf("bus: subscribe %s: %w", pattern, err)
	}
	return func() { sub.Unsubscribe() }, nil
}

// flush waits until the server knows of a subscription, when there is a link; otherwise it learns of it on connecting.
func (c *Client) flush() error {
	if !c.nc.IsConnected() {
		return nil
	}
	return c.nc.FlushTimeout(3 * time.Second)
}

// Consume hands over what a durable reader made by Prepare has not acknowledged yet, and then what comes. A message is
// acknowledged when take returns nil: by then it must be where a crash cannot reach it. After an error it comes again in a
// second or later. What take cannot use for good it must report and return nil for.
func (c *Client) Consume(ctx context.Context, stream, reader string, take func(subject string, payload []byte) error) (stop func(), err error) {
	r, err := c.js.Consumer(ctx, stream, reader)
	if err != nil {
		return nil, fmt.Errorf("bus: reader %s of %s: %w", reader, stream, err)
	}
	return c.consume(r, stream, func(m jetstream.Msg) {
		if take(m.Subject(), m.Data()) != nil {
			m.NakWithDelay(time.Second)
			return
		}
		m.Ack()
	})
}

// Stored takes one message and the time at which the server stored it, nanoseconds of the server's clock.
type Stored func(subject string, storedNS int64, payload []byte)

// Replay hands over all that a stream holds, in order, and then what comes. Caught is closed when all has been handed over that the
// stream held at the beginning. It leaves no trace at the server.
func (c *Client) Replay(ctx context.Context, stream string, h Stored) (stop func(), caught <-chan struct{}, err error) {
	fail := func(err error) (func(), <-chan struct{}, error) {
		return nil, nil, fmt.Errorf("bus: replay %s: %w", stream, err)
	}
	s, err := c.js.Stream(ctx, stream)
	if err != nil {
		return fail(err)
	}
	r, err := s.OrderedConsumer(ctx, jetstream.OrderedConsumerConfig{DeliverPolicy: jetstream.DeliverAllPolicy})
	if err != nil {
		return fail(err)
	}
	done := make(chan struct{})
	last := s.CachedInfo().State.LastSeq
	if s.CachedInfo().State.Msgs == 0 {
		last = 0
	}
	behind := last > 0
	if !behind {
		close(done)
	}
	stop, err = c.consume(r, stream, func(m jetstream.Msg) {
		about, err := m.Metadata()
		if err != nil {
			c.warn(fmt.Errorf("bus: read %s: %w", stream, err))
			return
		}
		h(m.Subject(), about.Timestamp.UnixNano(), m.Data())
		if behind && about.Sequence.Stream >= last { // where the newest alone is kept, the last of the beginning may be gone
			behind = false
			close(done)
		}
	})
	return stop, done, err
}

func (c *Client) consume(r jetstream.Consumer, stream string, h func(jetstream.Msg)) (stop func(), err error) {
	run, err := r.Consume(h, jetstream.PullExpiry(pullExpiry), jetstream.ConsumeErrHandler(func(_ jetstream.ConsumeContext, err error) {
		c.warn(fmt.Errorf("bus: read %s: %w", stream, err))
	}))
	if err != nil {
		return nil, fmt.Errorf("bus: read %s: %w", stream, err)
	}
	return func() { run.Stop(); <-run.Closed() }, nil
}

// pullExpiry is how long a request for messages stands. It bounds how long a reader takes to notice that its request was
// lost, for instance with the store of the base.
const pullExpiry = 5 * time.Second

// follower keeps up with the newest message of one subject. Whoever sets a field signals wake.
type follower struct {
	mu     sync.Mutex
	latest *nats.Msg // came in and is not handed over yet; a newer one takes its place
	fetch  bool      // the link was down: ask the stream
	wake   chan struct{}
}

func (f *follower) set(latest *nats.Msg, fetch bool) {
	f.mu.Lock()
	if latest != nil {
		f.latest = latest
	}
	f.fetch = f.fetch || fetch
	f.mu.Unlock()
	select {
	case f.wake <- struct{}{}:
	default:
	}
}

func (f *follower) take() (latest *nats.Msg, fetch bool) {
	f.mu.Lock()
	defer f.mu.Unlock()
	latest, fetch = f.latest, f.fetch
	f.latest, f.fetch = nil, false
	return latest, fetch
}

// Follow hands over the newest message of a subject of a stream that keeps the newest: now, after each change, and after
// each time the link was down. Of changes that come faster than they are taken only the last is handed over. A message may
// come twice, and an older one after a newer: the reader goes by the numbers in it.
func (c *Client) Follow(stream, subject string, h Handler) (stop func(), err error) {
	f := &follower{fetch: true, wake: make(chan struct{}, 1)}
	sub, err := c.nc.Subscribe(subject, func(m *nats.Msg) {
		if m.Subject == subject { // a reply can come here under the subject of what it answers
			f.set(m, false)
		}
	})
	if err != nil {
		return nil, fmt.Errorf("bus: follow %s: %w", subject, err)
	}
	if err := c.flush(); err != nil {
		sub.Unsubscribe()
		return nil, fmt.Errorf("bus: follow %s: %w", subject, err)
	}
	c.mu.Lock()
	c.followers[f] = struct{}{}
	c.mu.Unlock()

	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan struct{})
	f.set(nil, true)
	go func() {
		defer close(done)
		c.run(ctx, f, stream, subject, h)
	}()
	return func() {
		c.mu.Lock()
		delete(c.followers, f)
		c.mu.Unlock()
		sub.Unsubscribe()
		cancel()
		<-done
	}, nil
}

func (c *Client) run(ctx context.Context, f *follower, stream, subject string, h Handler) {
	again := time.NewTimer(0)
	again.Stop()
	defer again.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case <-again.C:
			f.set(nil, true)
		case <-f.wake:
			latest, fetch := f.take()
			if fetch {
				payload, _, err := c.Newest(ctx, stream, subject)
				if err != nil {
					again.Reset(time.Second)
				} else if payload != nil {
					h(subject, payload)
				}
			}
			if latest != nil {
				h(subject, latest.Data)
			}
		}
	}
}

// resume makes every follower ask for what it may have missed.
func (c *Client) resume() {
	c.mu.Lock()
	defer c.mu.Unlock()
	for f := range c.followers {
		f.set(nil, true)
	}
}
