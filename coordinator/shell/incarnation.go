package shell

import (
	"context"

	"selvage/internal/bus"
	"selvage/msgs"
)

// Incarnation returns a number above that of every base whose corrections and wants the bus still keeps, for the configuration of
// the core that is to speak next: robots follow no epoch that is older than one they have applied. The streams must have been made
// ([bus.Client.Prepare]). What the base did not sign does not count; verifier is nil in a fleet that does not sign.
func Incarnation(ctx context.Context, link *bus.Client, fleet string, robots []string, verifier msgs.Verifier) (uint64, error) {
	highest := uint64(0)
	for _, r := range robots {
		for _, kind := range [2]string{msgs.KindCorrection, msgs.KindWant} {
			subject := msgs.DownSubject(fleet, r, kind)
			b, _, err := link.Newest(ctx, bus.CorrectionStream(fleet), subject)
			if err != nil {
				return 0, err
			}
			if b == nil || verifier != nil && msgs.Verify(subject, 0, b, verifier) != nil {
				continue
			}
			// What cannot be read was not applied by any robot either.
			if kind == msgs.KindWant {
				if m, err := msgs.DecodeWant(b); err == nil {
					highest = max(highest, m.Epoch.Incarnation)
				}
			} else if m, err := msgs.DecodeCorrection(b); err == nil {
				highest = max(highest, m.Epoch.Incarnation)
			}
		}
	}
	return highest + 1, nil
}
