package coordinator

import (
	"fmt"
	"testing"

	"pgregory.net/rapid"

	"selvage/internal/survey"
	"selvage/msgs"
)

// Which ruling counts for a tie is what the survey folder says of the same rulings in the same order.
func TestRulingsAsInTheFolder(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		b := newBase(nil, 2, judging)
		s := &survey.Survey{}
		robots := []string{"r1", "r2", "r3"}
		for i := range 8 {
			near := rapid.SampledFrom(robots).Draw(t, "near")
			far := rapid.SampledFrom(robots).Draw(t, "far")
			m := &msgs.Tie{Header: msgs.Header{Robot: near}, ID: fmt.Sprint("t", i)}
			m.From = msgs.KeyRef{Robot: near, Session: rapid.Uint32Range(1, 2).Draw(t, "session")}
			m.To = msgs.KeyRef{Robot: far, Session: rapid.Uint32Range(1, 2).Draw(t, "session")}
			b.order = append(b.order, &tie{msg: m})
			s.Ties = append(s.Ties, survey.Tie{ID: m.ID, FromRobot: near, FromSession: m.From.Session, ToRobot: far, ToSession: m.To.Session})
		}
		for range rapid.IntRange(0, 12).Draw(t, "rulings") {
			x := rapid.IntRange(0, 2).Draw(t, "verdict")
			r := survey.Ruling{Verdict: []survey.RulingVerdict{survey.RuledHeld, survey.RuledRefused, survey.RuledFree}[x], By: "lead", Note: fmt.Sprint("ruling ", len(s.Rulings))}
			m := msgs.Ruling{Fleet: "fleet", Verdict: msgs.VerdictKind(x + 1), By: r.By, Note: r.Note}
			switch rapid.IntRange(1, 3).Draw(t, "target") {
			case 1:
				tie := rapid.SampledFrom(b.order).Draw(t, "tie").msg
				r.Target, r.Name = survey.OnTie, tie.ID
				m.Target, m.Robot, m.Tie = msgs.OnTie, tie.Header.Robot, tie.ID
			case 2:
				r.Target, r.Name = survey.OnRobot, rapid.SampledFrom(robots).Draw(t, "robot")
				m.Target, m.Robot = msgs.OnRobot, r.Name
			case 3:
				r.Target, r.Name, r.Session = survey.OnSession, rapid.SampledFrom(robots).Draw(t, "robot"), rapid.Uint32Range(1, 2).Draw(t, "session")
				m.Target, m.Robot, m.Session = msgs.OnSession, r.Name, r.Session
			}
			s.Rulings = append(s.Rulings, r)
			if err := b.Rule(0, m); err != nil {
				t.Fatal(err)
			}
			for i, want := range s.TieRulings() {
				got := b.order[i].ruled
				if (got == nil) != (want == nil) || got != nil && got.Note != want.Note {
					t.Fatalf("tie %d of %+v: %+v counts, in the folder %+v", i, s.Ties[i], got, want)
				}
			}
		}
	})
}
