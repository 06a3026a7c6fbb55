package coordinator

import (
	"fmt"
	"strings"
	"testing"

	"selvage/msgs"
)

// story writes a history as one line.
func story(changes []Change) string {
	var all []string
	for _, x := range changes {
		old := "none"
		if x.Old != 0 {
			old = x.Old.String()
		}
		all = append(all, fmt.Sprintf("%d s, epoch %d: %s to %s", x.AtNS/second, x.Epoch.Number, old, x.New))
	}
	return strings.Join(all, "; ")
}

func history(t *testing.T, b *base, robot, tie string) []Change {
	t.Helper()
	all := b.History()
	for i, f := range b.Findings() {
		if f.From.Robot == robot && f.Tie == tie {
			return all[i]
		}
	}
	t.Fatalf("no tie %s", tie)
	return nil
}

// A verdict that turns is kept with its time and solution; one that is only told again is not.
func TestHistory(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	b.sees(x, 2, y, 1)
	if h := b.History(); len(h) != 1 || len(h[0]) != 0 {
		t.Errorf("before any solution: %+v", h)
	}
	b.summarise(x)
	b.tick(31)
	b.summarise(x)
	b.tick(31)
	b.summarise(y)
	b.tick(31)
	b.summarise(y)
	b.tick(31)
	h := history(t, b, "r1", "r1-1")
	if got := story(h); got != "1 s, epoch 1: none to open; 63 s, epoch 3: open to held" {
		t.Error(got)
	}
	if h[0].Reason != "waiting for the separator of r2, which its next summary is to bring" || h[1].Reason != "taken as true on request" || h[1].Epoch.Incarnation != b.cfg.Incarnation {
		t.Errorf("%+v", h)
	}
	if f := b.Findings()[0]; f.SinceNS != 63*second {
		t.Errorf("held since %d", f.SinceNS)
	}
}

// Rulings that come while the fleet runs are followed by the next solution, told and kept, each with its reason; withdrawn, they leave
// the tie to the evidence as if they had never been.
func TestRulingsWhileRunning(t *testing.T) {
	b := newBase(t, 3, judging)
	threeRobots(b, 0.2)
	b.tick(31)
	free := b.Map()
	said := func(what string, out []Publish) {
		t.Helper()
		var told []string
		for _, payload := range of(out, "r1", msgs.KindVerdict) {
			v, err := msgs.DecodeVerdict(payload)
			if err != nil {
				t.Fatal(err)
			}
			if v.Tie == "r1-11" {
				told = append(told, v.Verdict.String()+": "+v.Reason)
			}
		}
		if len(told) != 1 || !strings.HasPrefix(told[0], what) {
			t.Errorf("told %q, expected %q", told, what)
		}
	}
	quiet := func(out []Publish) {
		t.Helper()
		if v := verdicts(t, out); len(v) != 0 {
			t.Errorf("told %q", v)
		}
	}
	b.rule("r1", "r1-11", msgs.Refused, "behind glass")
	if f := finding(t, b, "r1", "r1-11"); f.Verdict != msgs.Held {
		t.Errorf("before the next solution: %+v", f)
	}
	said("refused: ruled refused by lead: behind glass; it agrees", b.tick(31))
	b.rule("r1", "r1-11", msgs.Refused, "behind glass")
	quiet(b.tick(31))
	b.rule("r1", "r1-11", msgs.Held, "by tape")
	said("held: ruled held by lead: by tape; ", b.tick(31))
	b.hear("", msgs.KindRule, &msgs.Ruling{Fleet: "fleet", Target: msgs.OnRobot, Robot: "r3", Verdict: msgs.Refused, By: "lead", Note: "mast bent"})
	b.tick(31)
	if placed(t, b, "r3").Joined || !placed(t, b, "r2").Joined {
		t.Error("a robot that is ruled refused is still in the datum, or has taken others along")
	}
	if f := finding(t, b, "r3", "r3-1"); f.Verdict != msgs.Refused || !strings.HasPrefix(f.Reason, "ruled refused by lead (robot r3): mast bent") {
		t.Errorf("%+v", f)
	}
	b.hear("", msgs.KindRule, &msgs.Ruling{Fleet: "fleet", Target: msgs.OnRobot, Robot: "r3", Verdict: msgs.Open, By: "lead", Note: "it was not"})
	b.rule("r1", "r1-11", msgs.Open, "no matter")
	said("held: agrees ", b.tick(31))
	got := story(history(t, b, "r1", "r1-11"))
	if want := "1 s, epoch 1: none to held; 32 s, epoch 2: held to refused; 94 s, epoch 3: refused to held; 156 s, epoch 5: held to held"; got != want {
		t.Errorf("%s\nexpected\n%s", got, want)
	}
	if f := finding(t, b, "r1", "r1-11"); f.SinceNS != 94*second {
		t.Errorf("held since %d s", f.SinceNS/second)
	}
	for _, h := range b.History() {
		for k := range h {
			if k > 0 && h[k].Old != h[k-1].New {
				t.Errorf("history %+v", h)
			}
		}
	}
	b.summarise(newTrack("r1", 1, 30, 3, 0)) // several solutions later it is the map it was
	b.tick(200)
	never := newBase(t, 3, judging)
	threeRobots(never, 0.2)
	never.tick(31)
	never.summarise(newTrack("r1", 1, 30, 3, 0))
	never.tick(200)
	worst := 0.0
	for i, p := range never.Map() {
		for k := range p.Poses {
			worst = max(worst, apart(p.Poses[k], b.Map()[i].Poses[k]))
		}
	}
	if !(worst < 1e-6) || len(free) != 3 {
		t.Errorf("the map is %g m from that of a fleet on which nobody ruled", worst)
	}
}

// A ruling that comes and goes between two solutions leaves no trace, and one on what nobody has heard of waits for it.
func TestRulingBetweenSolutions(t *testing.T) {
	b := newBase(t, 3, judging)
	b.hear("", msgs.KindRule, &msgs.Ruling{Fleet: "fleet", Target: msgs.OnSession, Robot: "r1", Session: 1, Verdict: msgs.Refused, By: "lead", Note: "wheel off"})
	threeRobots(b, 0.2)
	b.tick(31)
	if f := finding(t, b, "r1", "r1-11"); f.Verdict != msgs.Refused || !strings.HasPrefix(f.Reason, "ruled refused by lead (session 1 of robot r1): wheel off") {
		t.Errorf("%+v", f)
	}
	epoch := b.Epoch()
	b.rule("r1", "r1-11", msgs.Held, "by tape")
	b.rule("r1", "r1-11", msgs.Open, "no")
	b.tick(31)
	if h := history(t, b, "r1", "r1-11"); len(h) != 1 {
		t.Errorf("%s", story(h))
	}
	if b.Epoch().Number != epoch.Number+1 { // it was asked for, and changes nothing
		t.Errorf("epoch %d after %d", b.Epoch().Number, epoch.Number)
	}
}

func TestRulingNotTaken(t *testing.T) {
	b := newBase(t, 3, judging)
	threeRobots(b, 0.2)
	b.tick(31)
	b.Tick(b.now)
	good := msgs.Ruling{Fleet: "fleet", Target: msgs.OnTie, Robot: "r1", Tie: "r1-11", Verdict: msgs.Refused, By: "lead", Note: "no"}
	for _, c := range []struct {
		want  string
		spoil func(r *msgs.Ruling)
	}{
		{"ruling for fleet other came to fleet fleet", func(r *msgs.Ruling) { r.Fleet = "other" }},
		{"rule: note: found none", func(r *msgs.Ruling) { r.Note = "" }},
		{"rule: target: found 0", func(r *msgs.Ruling) { r.Target = 0 }},
	} {
		r := good
		c.spoil(&r)
		if err := b.Rule(b.now, r); err == nil || !strings.HasPrefix(err.Error(), c.want) {
			t.Errorf("%v, expected %s", err, c.want)
		}
	}
	if err := b.Message(b.now, Message{Kind: msgs.KindRule, Payload: []byte{1}}); err == nil {
		t.Error("bytes that are no ruling were taken")
	}
	if b.dirty || len(b.rulings) != 0 {
		t.Error("what was refused has changed something")
	}
}

// However often a verdict turns, what is kept is bounded, and its end is the present verdict.
func TestHistoryIsBounded(t *testing.T) {
	b := newBase(t, 2, nil)
	x, y := newTrack("r1", 1, 4, 2, 1), newTrack("r2", 1, 4, 2, 2)
	b.summarise(x)
	b.summarise(y)
	b.sees(x, 2, y, 1)
	b.tick(31)
	b.turns = maxTurns - 1
	for k := range 5 {
		b.rule("r1", "r1-1", [2]msgs.VerdictKind{msgs.Refused, msgs.Held}[k%2], "turn")
		b.tick(31)
	}
	h := history(t, b, "r1", "r1-1")
	if got := story(h); got != "1 s, epoch 1: none to held; 156 s, epoch 6: held to refused" || h[1].New != b.Findings()[0].Verdict {
		t.Error(got)
	}
	if f := b.Findings()[0]; f.SinceNS != 156*second {
		t.Errorf("since %d", f.SinceNS)
	}
}
