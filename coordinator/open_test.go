package coordinator

import (
	"strings"
	"testing"

	"selvage/msgs"
)

// Whatever keeps a tie open, its reason says what would settle it.
func TestOpenSaysWhatWouldSettleIt(t *testing.T) {
	x, y := newTrack("r1", 1, 10, 2, 1), newTrack("r2", 1, 10, 2, 2)
	for _, c := range []struct {
		name string
		tell func(b *base)
		want string
	}{
		{"one tie", func(b *base) { b.summarise(x); b.summarise(y); b.sees(x, 2, y, 1) },
			"the ties between r1 and r2 rest on 1 place (r1-1) and lead by 1 of the 5 needed with no third robot to confirm them: 4 more ties between r1 and r2, more than 5 m along both tracks from r1-1 and from each other, or ties of a third robot with both, would settle it"},
		{"no summary", func(b *base) { b.summarise(x); b.sees(x, 2, y, 1) }, "waiting for the separator of r2, which its next summary is to bring"},
		{"too sharp", func(b *base) {
			b.summarise(x)
			b.summarise(y)
			m := b.tie(x, 2, y, 1, 0)
			for i := range m.Info {
				m.Info[i] *= 1e20
			}
			b.hear("r1", msgs.KindTie, m)
		}, "would settle it"},
		{"too little", func(b *base) {
			b.summarise(x)
			b.summarise(y)
			m := b.tie(x, 2, y, 1, 0)
			m.Info[8] = 0
			b.hear("r1", msgs.KindTie, m)
		}, "ties of whole poses that join r1 and r2 would settle it"},
		{"one session", func(b *base) {
			b.summarise(x)
			b.summarise(y)
			b.sees(x, 2, x, 5)
		}, "both ends lie in one session: it would be settled as a loop closure, by r1 itself"},
	} {
		b := newBase(t, 2, judging)
		c.tell(b)
		b.tick(31)
		if f := finding(t, b, "r1", "r1-1"); f.Verdict != msgs.Open || !strings.Contains(f.Reason, c.want) {
			t.Errorf("%s: %+v", c.name, f)
		}
	}
}
