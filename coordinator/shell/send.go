package shell

import (
	"context"
	"fmt"

	"selvage/coordinator"
	"selvage/msgs"
)

// workers is how many messages may be on their way.
const workers = 8

// lane is the key of a message in the outbox: of corrections and wants only the newest of each robot counts, of verdicts the
// newest on each tie.
type lane struct{ robot, kind, tie string }

func laneOf(p *coordinator.Publish) (lane, error) {
	to := lane{robot: p.Robot, kind: p.Kind}
	if p.Kind == msgs.KindVerdict {
		v, err := msgs.DecodeVerdict(p.Payload)
		if err != nil {
			return lane{}, err
		}
		to.tie = v.Tie
	}
	return to, nil
}

// send puts one message on the bus.
func (s *Shell) send(ctx context.Context, to lane, p coordinator.Publish) error {
	subject := msgs.DownSubject(s.options.Fleet, to.robot, to.kind)
	payload := p.Payload
	if s.options.Signer != nil {
		var err error
		if payload, err = msgs.Sign(subject, payload, s.options.Signer); err != nil {
			return err
		}
	}
	if to.kind != msgs.KindVerdict {
		if s.options.Lease != nil {
			return s.options.Lease.PublishNewest(ctx, subject, payload)
		}
		return s.link.PublishNewest(ctx, subject, payload)
	}
	v, err := msgs.DecodeVerdict(p.Payload)
	if err != nil {
		return err
	}
	id := fmt.Sprintf("%s.%s.%d.%d.%s", s.options.Fleet, to.robot, v.Epoch.Incarnation, v.Epoch.Number, v.Tie)
	_, err = s.link.Publish(ctx, subject, id, payload)
	return err
}
