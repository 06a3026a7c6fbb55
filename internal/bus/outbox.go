package bus

import (
	"context"
	"sync"
	"time"
)

// outboxRest is how long a worker rests after a failure.
const outboxRest = 500 * time.Millisecond

// Outbox holds messages of type V under keys of type K until they are sent. Whoever has a message puts it in and goes on; workers
// send what is there, the oldest first, and again what failed. A message takes the place of an earlier one with the same key that
// is still waiting, so that no queue grows while a link is down and nothing is sent that is outdated. Two messages of one key are
// never on their way at the same time; the order of messages of different keys is not promised.
type Outbox[K comparable, V any] struct {
	send func(ctx context.Context, key K, value V) error
	warn func(error)

	mu      sync.Mutex
	queue   []K // waiting and not on their way, oldest first
	entries map[K]*outgoing[V]
	failing bool
	wake    chan struct{}
}

type outgoing[V any] struct {
	value   V
	waiting bool
	flying  bool
}

// NewOutbox returns an empty outbox. What send returned an error for is sent again after a while; warn is told of the first failure
// after a success.
func NewOutbox[K comparable, V any](send func(ctx context.Context, key K, value V) error, warn func(error)) *Outbox[K, V] {
	return &Outbox[K, V]{send: send, warn: warn, entries: map[K]*outgoing[V]{}, wake: make(chan struct{}, 1)}
}

// Put leaves a message to be sent. It never blocks.
func (o *Outbox[K, V]) Put(key K, value V) {
	o.mu.Lock()
	defer o.mu.Unlock()
	e := o.entries[key]
	if e == nil {
		e = &outgoing[V]{}
		o.entries[key] = e
	}
	e.value = value
	if !e.waiting {
		e.waiting = true
		if !e.flying {
			o.enqueue(key)
		}
	}
}

// Empty tells whether nothing is waiting or on its way.
func (o *Outbox[K, V]) Empty() bool {
	o.mu.Lock()
	defer o.mu.Unlock()
	return len(o.entries) == 0
}

// Run sends with this many workers until ctx ends. What is not sent by then stays.
func (o *Outbox[K, V]) Run(ctx context.Context, workers int) {
	var wait sync.WaitGroup
	defer wait.Wait()
	for range workers {
		wait.Go(func() { o.work(ctx) })
	}
}

func (o *Outbox[K, V]) work(ctx context.Context) {
	for {
		key, value, ok := o.take()
		if !ok {
			select {
			case <-ctx.Done():
				return
			case <-o.wake:
				continue
			}
		}
		err := ctx.Err()
		if err == nil {
			err = o.send(ctx, key, value)
		}
		news := o.done(key, err)
		if ctx.Err() != nil {
			return
		}
		if err == nil {
			continue
		}
		if news {
			o.warn(err)
		}
		rest := time.NewTimer(outboxRest)
		select {
		case <-ctx.Done():
		case <-rest.C:
		}
		rest.Stop()
	}
}

// enqueue makes a key known to a worker. The lock is held.
func (o *Outbox[K, V]) enqueue(key K) {
	o.queue = append(o.queue, key)
	o.signal()
}

func (o *Outbox[K, V]) signal() {
	select {
	case o.wake <- struct{}{}:
	default:
	}
}

// take returns the oldest message, and wakes another worker when there are more.
func (o *Outbox[K, V]) take() (key K, value V, ok bool) {
	o.mu.Lock()
	defer o.mu.Unlock()
	if len(o.queue) == 0 {
		return key, value, false
	}
	key = o.queue[0]
	o.queue = o.queue[1:]
	if len(o.queue) > 0 {
		o.signal()
	}
	e := o.entries[key]
	e.waiting, e.flying = false, true
	return key, e.value, true
}

// done notes what became of a message, and tells whether a failure is the first in a row.
func (o *Outbox[K, V]) done(key K, err error) (news bool) {
	o.mu.Lock()
	defer o.mu.Unlock()
	e := o.entries[key]
	e.flying = false
	if err != nil {
		e.waiting = true // the message itself, or the one that took its place
	}
	if e.waiting {
		o.enqueue(key)
	} else {
		delete(o.entries, key)
	}
	news = err != nil && !o.failing
	o.failing = err != nil
	return news
}
