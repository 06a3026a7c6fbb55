package shell

import (
	"context"
	"fmt"
	"sync"
	"time"

	"selvage/agent"
	"selvage/agent/record"
	"selvage/msgs"
)

// keeper lets nothing out of what the agent publishes before the disk has what it came of. The owner adds, one goroutine commits: while
// it waits for the disk the next commit gathers.
type keeper struct {
	store *record.Store
	out   func(agent.Publish)
	warn  func(error)
	wake  chan struct{}

	mu      sync.Mutex
	waiting []agent.Publish
	flying  bool        // a commit has taken what waited before
	state   agent.State // that belongs to what is waiting
	record  uint64
	kept    agent.State // what is on the disk
	durable uint64
	moved   chan struct{} // closed when durable moves
}

func newKeeper(store *record.Store, out func(agent.Publish), warn func(error)) *keeper {
	return &keeper{store: store, out: out, warn: warn, wake: make(chan struct{}, 1), moved: make(chan struct{})}
}

// add takes what an event has led to.
func (k *keeper) add(out []agent.Publish, newest uint64) {
	state := k.store.State()
	k.mu.Lock()
	for _, p := range out {
		k.put(p)
	}
	k.record, k.state = newest, state
	idle := len(k.waiting) == 0 && newest <= k.durable && state == k.kept
	k.mu.Unlock()
	if idle {
		return
	}
	select {
	case k.wake <- struct{}{}:
	default: // it will see this too
	}
}

// put adds a message; of other kinds than ties only the newest counts.
func (k *keeper) put(p agent.Publish) {
	if p.Kind != msgs.KindTie {
		for i := range k.waiting {
			if k.waiting[i].Kind == p.Kind {
				k.waiting[i] = p
				return
			}
		}
	}
	k.waiting = append(k.waiting, p)
}

// run commits until ctx ends.
func (k *keeper) run(ctx context.Context) {
	failing := false
	for {
		select {
		case <-ctx.Done():
			return
		case <-k.wake:
		}
		for err := k.commit(); err != nil; err = k.commit() {
			if !failing {
				k.warn(fmt.Errorf("nothing is sent until this works: %w", err))
			}
			failing = true
			rest := time.NewTimer(time.Second)
			select {
			case <-ctx.Done():
				rest.Stop()
				return
			case <-rest.C:
			}
		}
		failing = false
	}
}

// commit makes durable what there is and lets out what waited for it.
func (k *keeper) commit() error {
	k.mu.Lock()
	batch, state := k.waiting, k.state
	k.waiting, k.flying = nil, true
	k.mu.Unlock()
	durable, err := k.store.Commit(state)
	if err == nil {
		for _, p := range batch {
			k.out(p)
		}
	}
	k.mu.Lock()
	defer k.mu.Unlock()
	k.flying = false
	if err != nil {
		later := k.waiting
		k.waiting = batch
		for _, p := range later {
			k.put(p)
		}
		return err
	}
	k.durable, k.kept = durable, state
	close(k.moved)
	k.moved = make(chan struct{})
	return nil
}

// wait waits until a record is durable.
func (k *keeper) wait(ctx context.Context, number uint64, stopped <-chan struct{}) error {
	for {
		k.mu.Lock()
		durable, moved := k.durable, k.moved
		k.mu.Unlock()
		if durable >= number {
			return nil
		}
		select {
		case <-moved:
		case <-stopped:
			return ErrStopped
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

// empty tells whether nothing waits.
func (k *keeper) empty() bool {
	k.mu.Lock()
	defer k.mu.Unlock()
	return len(k.waiting) == 0 && !k.flying
}
