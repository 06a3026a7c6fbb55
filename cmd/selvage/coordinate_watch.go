package main

import (
	"context"
	"time"

	"selvage/coordinator"
	"selvage/coordinator/shell"
	"selvage/msgs"
)

// watchCoordinator logs each solution, until ctx ends.
func watchCoordinator(ctx context.Context, con *console, term uint64, s *shell.Shell) {
	ticker := time.NewTicker(time.Second / 2)
	defer ticker.Stop()
	var last msgs.Epoch
	for {
		select {
		case <-ctx.Done():
			return
		case <-ticker.C:
		}
		var now msgs.Epoch
		var findings []coordinator.Finding
		var units []coordinator.Placed
		err := s.Do(ctx, func(c *coordinator.Coordinator) {
			if now = c.Epoch(); now != last {
				findings, units = c.Findings(), c.Map()
			}
		})
		if err != nil || now == last {
			continue
		}
		last = now
		if len(units) == 0 {
			continue // it is that of a former coordinator
		}
		counts := map[msgs.VerdictKind]int{}
		for i := range findings {
			counts[findings[i].Verdict]++
		}
		joined := 0
		for i := range units {
			if units[i].Joined {
				joined++
			}
		}
		con.log.Info().Uint64("term", term).Str("epoch", epochText(now)).Int("sessions", len(units)).Int("joined", joined).
			Int("held", counts[msgs.Held]).Int("open", counts[msgs.Open]).Int("refused", counts[msgs.Refused]).Msg("solved")
		for i := range findings {
			if f := &findings[i]; f.Verdict != msgs.Held {
				con.log.Debug().Str("epoch", epochText(now)).Str("tie", f.Tie).Str("verdict", f.Verdict.String()).Str("reason", f.Reason).Msg("verdict")
			}
		}
	}
}
