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
	payload, err := s.sign(subject, p.Payload)
	if err != nil {
		return err
	}
	size := len(subject) + len(payload)
	switch p.Kind {
	case msgs.KindTie:
		d, err := msgs.DecodeTie(payload)
		if err != nil {
			return err
		}
		id := fmt.Sprintf("%s.%s.%x.%d", s.options.Fleet, s.options.Robot, d.Header.Journal, p.Number)
		if _, err := s.link.Publish(ctx, subject, id, payload); err != nil {
			return err
		}
	case msgs.KindSummary:
		if len(payload) > msgs.ChunkAbove {
			if size, err = s.sendChunks(ctx, payload, p.Number); err != nil {
				return err
			}
		} else if err := s.link.PublishNewest(ctx, subject, payload); err != nil {
			return err
		}
	default:
		if err := s.link.PublishHeartbeat(subject, payload); err != nil {
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

// sign returns a message with the signature of the robot, in a fleet that signs.
func (s *Shell) sign(subject string, payload []byte) ([]byte, error) {
	if s.options.Signer == nil {
		return payload, nil
	}
	return msgs.Sign(subject, payload, s.options.Signer)
}

// sendChunks publishes a large summary and returns what it took. The slot that the newest head on the bus speaks of stays as it is
// until there is a head that speaks of the other one.
func (s *Shell) sendChunks(ctx context.Context, payload []byte, version uint64) (size int, err error) {
	chunks, head, err := msgs.Split(payload, version, s.slot)
	if err != nil {
		return 0, err
	}
	publish := func(subject string, b []byte) error {
		b, err := s.sign(subject, b)
		if err != nil {
			return err
		}
		size += len(subject) + len(b)
		return s.link.PublishNewest(ctx, subject, b)
	}
	for n, chunk := range chunks {
		if err := publish(msgs.ChunkSubject(s.options.Fleet, s.options.Robot, s.slot, n), chunk); err != nil {
			return 0, err
		}
	}
	if err := publish(msgs.HeadSubject(s.options.Fleet, s.options.Robot), head); err != nil {
		return 0, err
	}
	s.slot = s.slot.Other()
	return size, nil
}
