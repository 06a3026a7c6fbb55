package shell

import (
	"context"
	"fmt"

	"selvage/coordinator"
	"selvage/internal/bus"
	"selvage/msgs"
)

// listen hears what the robots say and people decide until ctx ends. It tells began when it has heard all that the streams held, or why it could not.
func (s *Shell) listen(ctx context.Context, began chan<- error) {
	var stops []func()
	var held []<-chan struct{}
	defer func() {
		for _, stop := range stops {
			stop()
		}
	}()
	start := func(stop func(), err error) error {
		if err == nil {
			stops = append(stops, stop)
		}
		return err
	}
	replay := func(stream string, h bus.Stored) error {
		stop, caught, err := s.link.Replay(ctx, stream, h)
		held = append(held, caught)
		return start(stop, err)
	}
	begin := func() error {
		pieces := make(map[string]*msgs.Assembler, len(s.options.Robots))
		for _, r := range s.options.Robots {
			pieces[r] = &msgs.Assembler{}
			take := func(kind string) bus.Stored {
				own := msgs.UpSubject(s.options.Fleet, r, kind)
				return func(subject string, storedNS int64, b []byte) {
					switch {
					case subject != own:
						s.door.Refuse(s.now(), subject, fmt.Errorf("came as an answer on %s", own))
					case s.door.Admit(s.now(), subject, storedNS, b):
						s.hear(ctx, subject, storedNS, coordinator.Message{Robot: r, Kind: kind, Payload: b})
					}
				}
			}
			err := replay(bus.TieStream(s.options.Fleet, r), take(msgs.KindTie))
			if err != nil {
				return err
			}
			beat := take(msgs.KindHeartbeat)
			err = start(s.link.Subscribe(msgs.UpSubject(s.options.Fleet, r, msgs.KindHeartbeat), func(subject string, b []byte) {
				beat(subject, s.now(), b)
			}))
			if err != nil {
				return err
			}
		}
		rule := msgs.RuleSubject(s.options.Fleet)
		err := replay(bus.RuleStream(s.options.Fleet), func(subject string, storedNS int64, b []byte) {
			switch {
			case subject != rule:
				s.door.Refuse(s.now(), subject, fmt.Errorf("came as an answer on %s", rule))
			case s.door.Admit(s.now(), subject, storedNS, b):
				s.hear(ctx, subject, storedNS, coordinator.Message{Kind: msgs.KindRule, Payload: b})
			}
		})
		if err != nil {
			return err
		}
		return replay(bus.SummaryStream(s.options.Fleet), func(subject string, storedNS int64, b []byte) {
			if s.door.Admit(s.now(), subject, storedNS, b) {
				s.summary(ctx, pieces, subject, storedNS, b)
			}
		})
	}
	err := begin()
	for i := 0; err == nil && i < len(held); i++ {
		select {
		case <-held[i]:
		case <-ctx.Done():
			err = ctx.Err()
		}
	}
	began <- err
	<-ctx.Done()
}

// summary takes a summary or a piece of one. One that was put together must be signed like one that came whole.
func (s *Shell) summary(ctx context.Context, pieces map[string]*msgs.Assembler, subject string, storedNS int64, b []byte) {
	at, err := msgs.ParseSubject(subject)
	if err != nil {
		s.door.Refuse(s.now(), subject, err)
		return
	}
	whole, err := pieces[at.Robot].Accept(at, b)
	if err != nil {
		s.door.Refuse(s.now(), subject, err)
		return
	}
	own := msgs.UpSubject(at.Fleet, at.Robot, msgs.KindSummary)
	if whole != nil && (subject == own || s.door.Admit(s.now(), own, storedNS, whole)) {
		s.hear(ctx, own, storedNS, coordinator.Message{Robot: at.Robot, Kind: msgs.KindSummary, Payload: whole})
	}
}

// hear gives the core a message that the bus has stored at storedNS.
func (s *Shell) hear(ctx context.Context, subject string, storedNS int64, m coordinator.Message) {
	var refused error
	err := s.call(ctx, func() {
		if refused = s.core.Message(s.now(), m); refused == nil && m.Robot != "" {
			s.heard[m.Robot] = max(s.heard[m.Robot], storedNS)
		}
	})
	if err != nil {
		return // it stops
	}
	if refused != nil {
		s.door.Refuse(s.now(), subject, refused)
	}
}
