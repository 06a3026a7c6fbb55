package shell

import (
	"strings"
	"testing"

	"selvage/internal/bus"
	"selvage/msgs"
)

func ruling(t *testing.T, v msgs.VerdictKind, note string) []byte {
	t.Helper()
	return marshal(t, &msgs.Ruling{Fleet: "f", Target: msgs.OnTie, Robot: "r1", Tie: "tie1", Verdict: v, By: "lead", Note: note})
}

// A ruling that comes while the fleet runs turns the verdict, and a coordinator that starts anew finds it on the bus.
func TestRulingsOnTheBus(t *testing.T) {
	server := serve(t)
	base, r1, r2, tool := connect(t, server, "base"), connect(t, server, "r1"), connect(t, server, "r2"), connect(t, server, "tool")
	verdicts := make(chan *msgs.Verdict, 100)
	follow := func() (stop func()) {
		t.Helper()
		stop, _, err := r1.Replay(deadline(t), bus.VerdictStream("f"), func(_ string, _ int64, b []byte) {
			v, err := msgs.DecodeVerdict(b)
			if err != nil {
				t.Error(err)
				return
			}
			verdicts <- v
		})
		if err != nil {
			t.Fatal(err)
		}
		return stop
	}
	expect := func(incarnation uint64, kind msgs.VerdictKind, reason string) {
		t.Helper()
		until(t, verdicts, kind.String()+" for "+reason, func(v *msgs.Verdict) bool {
			return v.Epoch.Incarnation == incarnation && v.Tie == "tie1" && v.Verdict == kind && strings.HasPrefix(v.Reason, reason)
		})
	}
	_, warnings, stop := run(t, base, 1)
	defer follow()()
	publish(t, r1, "up.f.r1.tie", "1", tie(t, 1))
	publish(t, r1, "up.f.r1.summary", "", summary(t, "r1", 1, 3))
	publish(t, r2, "up.f.r2.summary", "", summary(t, "r2", 1, 3))
	expect(1, msgs.Held, "taken as true")
	publish(t, tool, msgs.RuleSubject("f"), "a", ruling(t, msgs.Refused, "behind glass"))
	expect(1, msgs.Refused, "ruled refused by lead: behind glass")
	publish(t, tool, msgs.RuleSubject("f"), "b", []byte("no ruling"))
	until(t, warnings, "warning", func(err error) bool { return strings.Contains(err.Error(), "rule.f: rule:") })
	stop()
	_, _, stop = run(t, base, 2)
	defer stop()
	expect(2, msgs.Refused, "ruled refused by lead: behind glass")
	publish(t, tool, msgs.RuleSubject("f"), "c", ruling(t, msgs.Open, "it was clear"))
	expect(2, msgs.Held, "taken as true")
}
