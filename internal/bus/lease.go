package bus

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"github.com/nats-io/nats.go/jetstream"
)

var (
	// ErrLeaseHeld means that somebody holds the lease.
	ErrLeaseHeld = errors.New("the lease is held")
	// ErrLeaseLost means that the lease ran out or somebody else has it.
	ErrLeaseLost = errors.New("the lease is lost")
)

// wrongSequence is the server's refusal of a message whose condition on a sequence does not hold.
const wrongSequence jetstream.ErrorCode = 10071

// Lease is the right of one coordinator to speak for a fleet. It is a message that runs out: as long as it is the newest of
// its subject, what the holder publishes through it is stored, and afterwards refused by the server, however late the
// holder notices. A message that is not valid gives nobody the lease: it is overwritten.
type Lease struct {
	client          *Client
	stream, subject string
	ttl             time.Duration
	valid           func(payload []byte) bool

	mu       sync.Mutex // one publish at a time, since a renewal changes the sequence that the others name
	sequence uint64
	payload  []byte // of the newest message that was sent for the lease
	unsure   bool   // whether that was stored
}

// TakeLease takes the lease on a subject of a fleet's correction stream, for ttl, at least a second, from now and from each
// renewal. Valid tells whether a message of the lease is by somebody who may hold it: the server puts replies on any subject that a
// client names, so what is there may be rubbish.
func (c *Client) TakeLease(ctx context.Context, fleet, subject string, payload []byte, ttl time.Duration, valid func(payload []byte) bool) (*Lease, error) {
	l := &Lease{client: c, stream: CorrectionStream(fleet), subject: subject, ttl: ttl, valid: valid}
	err := l.overRubbish(ctx, func() error { return l.put(ctx, payload) })
	if errors.Is(err, ErrLeaseLost) {
		return nil, ErrLeaseHeld
	}
	if err != nil {
		return nil, err
	}
	return l, nil
}

// Renew begins the time of the lease anew.
func (l *Lease) Renew(ctx context.Context, payload []byte) error {
	l.mu.Lock()
	defer l.mu.Unlock()
	if err := l.settle(ctx); err != nil {
		return err
	}
	return l.overRubbish(ctx, func() error { return l.put(ctx, payload) })
}

// PublishNewest is Client.PublishNewest as long as the lease lasts, and ErrLeaseLost afterwards. The subject must be in the
// correction stream of the fleet.
func (l *Lease) PublishNewest(ctx context.Context, subject string, payload []byte) error {
	l.mu.Lock()
	defer l.mu.Unlock()
	if err := l.settle(ctx); err != nil {
		return err
	}
	return l.overRubbish(ctx, func() error {
		_, err := l.client.publish(ctx, subject, payload, jetstream.WithExpectLastSequenceForSubject(l.sequence, l.subject))
		return lost(err)
	})
}

// overRubbish does something that needs the lease, and once more when a message that is not valid was in the way: what was put there
// becomes the message that the lease goes on from.
func (l *Lease) overRubbish(ctx context.Context, do func() error) error {
	err := do()
	if !errors.Is(err, ErrLeaseLost) {
		return err
	}
	payload, sequence, newest := l.client.Newest(ctx, l.stream, l.subject)
	if newest != nil || payload == nil || l.valid(payload) {
		return err
	}
	l.sequence = sequence
	return do()
}

// put stores the message of the lease after the one with the sequence known.
func (l *Lease) put(ctx context.Context, payload []byte) error {
	l.payload, l.unsure = payload, true
	ack, err := l.client.publish(ctx, l.subject, payload, jetstream.WithExpectLastSequencePerSubject(l.sequence), jetstream.WithMsgTTL(l.ttl))
	if err != nil {
		return lost(err)
	}
	l.sequence, l.unsure = ack.Sequence, false
	return nil
}

// settle finds out what became of a message of the lease whose acknowledgement did not come.
func (l *Lease) settle(ctx context.Context) error {
	if !l.unsure {
		return nil
	}
	payload, sequence, err := l.client.Newest(ctx, l.stream, l.subject)
	if err != nil {
		return err
	}
	if sequence != l.sequence && !bytes.Equal(payload, l.payload) && (payload == nil || l.valid(payload)) {
		return fmt.Errorf("bus: %s: %w", l.subject, ErrLeaseLost)
	}
	l.sequence, l.unsure = sequence, false
	return nil
}

func lost(err error) error {
	var api *jetstream.APIError
	if errors.As(err, &api) && api.ErrorCode == wrongSequence {
		return fmt.Errorf("%w: %v", ErrLeaseLost, err)
	}
	return err
}
