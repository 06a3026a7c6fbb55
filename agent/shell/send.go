package shell

import (
	"context"
	"fmt"

	"selvage/agent"
	"selvage/msgs"
)

// workers is how many messages may be on their way: a large summary, and beside it a heartbeat and ties. Over a link of 100 ms
// there and back that is some 70 ties a second after a cut.
const workers = 8

// lane is the key of a message in the outbox: every tie has a lane of its own, of other kinds only the newest counts.
type lane struct {
	kind   string
	number uint64
}

func laneOf(p *agent.Publish) lane {
	if p.Kind == msgs.KindTie {
		return lane{p.Kind, p.Number}
	}
	return lane{kind: p.Kind}
}

// send puts one message on the bus.
func (s *Shell) send(ctx context.Context, to lane, p agent.Publish) error {
	subject := msgs.UpSubject(s.options.Fleet, s.options.Robot, p.Kind)
	size := len(subject) + len(p.Payload)
	switch p.Kind {
	case msgs.KindTie:
		d, err := msgs.DecodeTie(p.Payload)
		if err != nil {
			return err
		}
		id := fmt.Sprintf("%s.%s.%x.%d", s.options.Fleet, s.options.Robot, d.Header.Journal, p.Number)
		if _, err := s.link.Publish(ctx, subject, id, p.Payload); err != nil {
			return err
		}
	case msgs.KindSummary:
		if len(p.Payload) > msgs.ChunkAbove {
			var err error
			if size, err = s.sendChunks(ctx, &p); err != nil {
				return err
			}
		} else if err := s.link.PublishNewest(ctx, subject, p.Payload); err != nil {
			return err
		}
	default:
		if err := s.link.PublishHeartbeat(subject, p.Payload); err != nil {
			return err
		}
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	s.traffic.Up += size
	s.traffic.Messages++
	if p.Kind == msgs.KindSummary {
		s.traffic.Summaries++
		s.traffic.LargestSummary = max(s.traffic.LargestSummary, size)
	}
	return nil
}

// sendChunks publishes a large summary and returns what it took. The slot that the newest head on the bus speaks of stays as it is
// until there is a head that speaks of the other one.
func (s *Shell) sendChunks(ctx context.Context, p *agent.Publish) (size int, err error) {
	chunks, head, err := msgs.Split(p.Payload, p.Number, s.slot)
	if err != nil {
		return 0, err
	}
	for n, chunk := range chunks {
		subject := msgs.ChunkSubject(s.options.Fleet, s.options.Robot, s.slot, n)
		if err := s.link.PublishNewest(ctx, subject, chunk); err != nil {
			return 0, err
		}
		size += len(subject) + len(chunk)
	}
	subject := msgs.HeadSubject(s.options.Fleet, s.options.Robot)
	if err := s.link.PublishNewest(ctx, subject, head); err != nil {
		return 0, err
	}
	s.slot = s.slot.Other()
	return size + len(subject) + len(head), nil
}
