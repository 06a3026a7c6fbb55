package shell

import (
	"context"
	"fmt"

	"selvage/coordinator"
	"selvage/internal/bus"
	"selvage/msgs"
)

// listen hears what the robots say until ctx ends. It tells began whether it could start.
func (s *Shell) listen(ctx context.Context, began chan<- error) {
	var stops []func()
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
	begin := func() error {
		pieces := make(map[string]*msgs.Assembler, len(s.options.Robots))
		for _, r := range s.options.Robots {
			pieces[r] = &msgs.Assembler{}
			tie := msgs.UpSubject(s.options.Fleet, r, msgs.KindTie)
			err := start(s.link.Replay(ctx, bus.TieStream(s.options.Fleet, r), func(subject string, b []byte) {
				if subject == tie {
					s.hear(ctx, coordinator.Message{Robot: r, Kind: msgs.KindTie, Payload: b})
				}
			}))
			if err != nil {
				return err
			}
			err = start(s.link.Subscribe(msgs.UpSubject(s.options.Fleet, r, msgs.KindHeartbeat), func(_ string, b []byte) {
				s.hear(ctx, coordinator.Message{Robot: r, Kind: msgs.KindHeartbeat, Payload: b})
			}))
			if err != nil {
				return err
			}
		}
		return start(s.link.Replay(ctx, bus.SummaryStream(s.options.Fleet), func(subject string, b []byte) { s.summary(ctx, pieces, subject, b) }))
	}
	began <- begin()
	<-ctx.Done()
}

// summary takes a summary or a piece of one.
func (s *Shell) summary(ctx context.Context, pieces map[string]*msgs.Assembler, subject string, b []byte) {
	at, err := msgs.ParseSubject(subject)
	if err != nil {
		s.options.Warn(err)
		return
	}
	if pieces[at.Robot] == nil {
		s.options.Warn(fmt.Errorf("%s: a robot that is not of the fleet", subject))
		return
	}
	whole, err := pieces[at.Robot].Accept(at, b)
	if err != nil {
		s.options.Warn(fmt.Errorf("%s: %w", subject, err))
		return
	}
	if whole != nil {
		s.hear(ctx, coordinator.Message{Robot: at.Robot, Kind: msgs.KindSummary, Payload: whole})
	}
}

// hear gives the core a message from a robot.
func (s *Shell) hear(ctx context.Context, m coordinator.Message) {
	var refused error
	if err := s.call(ctx, func() { refused = s.core.Message(s.now(), m) }); err != nil {
		return // it stops
	}
	if refused != nil {
		s.options.Warn(fmt.Errorf("%s of %s: %w", m.Kind, m.Robot, refused))
	}
}
