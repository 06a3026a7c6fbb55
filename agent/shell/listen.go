package shell

import (
	"context"
	"time"

	"selvage/agent"
	"selvage/internal/bus"
	"selvage/msgs"
)

// listen hears what the base says until ctx ends.
func (s *Shell) listen(ctx context.Context) {
	corrections := bus.CorrectionStream(s.options.Fleet)
	for _, kind := range [2]string{msgs.KindWant, msgs.KindCorrection} {
		stop := s.insist(ctx, func() (func(), error) {
			return s.link.Follow(corrections, s.subject(kind), func(subject string, b []byte) { s.hear(ctx, subject, kind, b) })
		})
		defer stop()
	}
	stop := s.insist(ctx, func() (func(), error) {
		return s.link.Consume(ctx, bus.VerdictStream(s.options.Fleet), s.options.Robot, func(subject string, b []byte) error {
			s.hear(ctx, subject, msgs.KindVerdict, b)
			return ctx.Err()
		})
	})
	defer stop()
	<-ctx.Done()
}

func (s *Shell) subject(kind string) string {
	return msgs.DownSubject(s.options.Fleet, s.options.Robot, kind)
}

// insist starts a reader, and tries again every second while that fails: the base may not be there yet.
func (s *Shell) insist(ctx context.Context, start func() (stop func(), err error)) (stop func()) {
	for again := false; ; again = true {
		stop, err := start()
		if err == nil {
			return stop
		}
		if ctx.Err() != nil {
			return func() {}
		}
		if !again {
			s.options.Warn(err)
		}
		rest := time.NewTimer(time.Second)
		select {
		case <-ctx.Done():
		case <-rest.C:
		}
		rest.Stop()
	}
}

// hear gives the core a message from the base. Since the key of the base is never revoked, no matter when the message was stored.
func (s *Shell) hear(ctx context.Context, subject, kind string, payload []byte) {
	s.mu.Lock()
	s.traffic.Down += len(subject) + len(payload)
	s.mu.Unlock()
	if !s.door.Admit(s.now(), subject, 0, payload) {
		return
	}
	var refused error
	if err := s.call(ctx, func() { _, refused = s.handle(agent.Message{Kind: kind, Payload: payload}) }); err != nil {
		return // it stops
	}
	if refused != nil {
		s.door.Refuse(s.now(), subject, refused)
	}
}
