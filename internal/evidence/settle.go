package evidence

import (
	"fmt"
	"math"
	"strings"
)

// What an open finding says: what is known of the tie, and which measurement would settle it, by the names of units and ties and in
// metres travelled.

// name is what a tie is called.
func (b *body) name(t int) string {
	if n := b.ids[t]; n != "" {
		return n
	}
	return fmt.Sprintf("number %d", t)
}

// named lists ties, not more than three of them.
func (b *body) named(ties []int) string {
	const most = 3
	var names []string
	for _, t := range ties[:min(len(ties), most)] {
		names = append(names, b.name(t))
	}
	if n := len(ties) - most; n > 0 {
		names = append(names, fmt.Sprintf("%d more", n))
	}
	if len(names) < 2 {
		return strings.Join(names, "")
	}
	return strings.Join(names[:len(names)-1], ", ") + " and " + names[len(names)-1]
}

func (b *body) names(l *link) string { return b.pairName(l.a, l.b) }

func (b *body) pairName(u, v int) string {
	return fmt.Sprintf("%s and %s", b.tracks[u].Name, b.tracks[v].Name)
}

// more asks for ties at other places than the given ones.
func (b *body) more(n int, pair string, apart float64, from []int) string {
	if n == 1 {
		return fmt.Sprintf("1 more tie between %s, more than %g m along both tracks from %s", pair, apart, b.named(from))
	}
	return fmt.Sprintf("%d more ties between %s, more than %g m along both tracks from %s and from each other", n, pair, apart, b.named(from))
}

func count(places int) string {
	if places == 1 {
		return "1 place"
	}
	return fmt.Sprintf("%d places", places)
}

// onePlace explains a tie that nothing but ties of the same place speaks about.
func (b *body) onePlace(t int) string {
	return fmt.Sprintf("nothing but ties of the same place speaks about it: %s would settle it", b.more(1, b.names(&b.links[t]), b.o.PlaceM, []int{t}))
}

// badly explains a tie that the prediction neither passes nor refuses.
func (b *body) badly(t int, p *prediction) string {
	return fmt.Sprintf("fits the ties held badly: misclosure %.1f, bound %.1f, refused from %.1f on; %s, but near it, would settle it",
		p.squared, b.gate, b.refusal(p), b.more(1, b.names(&b.links[t]), b.o.PlaceM, []int{t}))
}

// faraway explains a tie whose prediction comes from so far along the tracks that it would let many poses pass. mates are the ties
// of its pair that are held.
func (b *body) faraway(t int, mates []int) string {
	l := &b.links[t]
	ask := b.more(1, b.names(l), b.o.PlaceM, []int{t})
	nearest, along := -1, [2]float64{}
	for _, x := range mates {
		if x == t || !b.apart(x, t) {
			continue
		}
		m := &b.links[x]
		d := [2]float64{math.Abs(b.tracks[l.a].TravelM[l.i] - b.tracks[l.a].TravelM[m.i]), math.Abs(b.tracks[l.b].TravelM[l.j] - b.tracks[l.b].TravelM[m.j])}
		if nearest < 0 || d[0]+d[1] < along[0]+along[1] {
			nearest, along = x, d
		}
	}
	if nearest < 0 {
		return fmt.Sprintf("agrees with the ties held, but by so long a way through other robots that it might by chance: %s would settle it", ask)
	}
	return fmt.Sprintf("agrees with the ties held, but the nearest of its two robots, %s, is %.0f m along the track of %s and %.0f m along that of %s away, so that it might by chance: %s, yet nearer than that would settle it",
		b.name(nearest), along[0], b.tracks[l.a].Name, along[1], b.tracks[l.b].Name, ask)
}

// crossed explains a tie that its own pair bears out and the way over other robots, by the given ties, contradicts.
func (b *body) crossed(t int, q *prediction, way []int) string {
	l := &b.links[t]
	m := &b.links[way[0]]
	return fmt.Sprintf("agrees with the ties between %s, but the way over %s contradicts these: misclosure %.1f, bound %.1f; %s would settle which are wrong",
		b.names(l), b.named(way), q.squared, b.refusal(q), b.more(1, b.names(m), b.o.PlaceM, []int{way[0]}))
}

// standing is what the fleet says of the ties of one pair: the hypothesis with most places and its rivals.
type standing struct {
	f      *fleet
	w      *weighed
	island []int
	best   int // hypothesis
}

// undetermined explains why a tie between two islands stays open.
func (b *body) undetermined(t int, f *fleet, w *weighed, r *Result) {
	x, l := &r.Ties[t], &b.links[t]
	s := standing{f: f, w: w, island: r.Island, best: -1}
	for k := range f.hs {
		if f.hs[k].a == l.a && f.hs[k].b == l.b && (s.best < 0 || f.hs[k].weight > f.hs[s.best].weight) {
			s.best = k
		}
	}
	switch {
	case s.best < 0:
		x.Reason = fmt.Sprintf("there are too many ties between %s to be compared with the effort allowed: a ruling on one of them would settle it", b.names(l))
	case f.hs[s.best].blurred:
		x.Reason = fmt.Sprintf("too many sets of ties between %s contradict each other to be told apart: a ruling on one of them, or ties of %s, would settle it",
			b.names(l), b.third(&s, l.a, l.b))
	case x.Hypothesis == s.best:
		x.Reason = b.stands(&s)
	default:
		x.Reason = b.opposed(&s, x.Hypothesis)
	}
}

// rests says on what a hypothesis rests.
func (b *body) rests(h *hypothesis) string {
	return fmt.Sprintf("on %s (%s)", count(len(h.spots)), b.named(h.spots))
}

// need is the margin that a hypothesis needs to be held.
func (b *body) need(s *standing, k int) int {
	if s.w.cycle[k] {
		return b.o.CycleMargin
	}
	return b.o.BridgeMargin
}

// stands says why the best set of a pair is not held, and what would settle that.
func (b *body) stands(s *standing) string {
	h, margin, need := &s.f.hs[s.best], s.w.margin[s.best], b.need(s, s.best)
	pair := b.pairName(h.a, h.b)
	text := fmt.Sprintf("the ties between %s rest %s", pair, b.rests(h))
	switch {
	case h.weight == 0: // see demote
		return text + ", and no loop through other robots confirms them well enough: " + b.more(1, pair, b.o.PlaceM, h.spots) + ", would settle it"
	case margin < 0:
		return text + ", and the rest of the fleet speaks against them: others more than " + fmt.Sprintf("%g m along both tracks from %s would settle it", b.o.PlaceM, b.named(h.spots))
	case margin >= need:
		return text + fmt.Sprintf(" and might agree by chance (%.2g such sets expected, %g allowed): ", s.w.expected[s.best], b.o.Chance) +
			b.more(1, pair, b.o.PlaceM, h.spots) + ", that agrees with them would settle it"
	case s.w.frail[s.best] && s.w.cycle[s.best]:
		return text + ", and all that confirms them falls away with two places struck out: where one place looks like another, all robots that come by err alike; " +
			b.more(max(1, strikes+1-len(h.spots)), pair, 2*b.o.PlaceM, h.spots) + ", would settle it"
	case s.w.cycle[s.best]:
		return text + fmt.Sprintf(" and with all that confirms them lead by %d of the %d needed: ", margin, need) + b.more(need-margin, pair, b.o.PlaceM, h.spots) + ", would settle it"
	}
	return text + fmt.Sprintf(" and lead by %d of the %d needed with no third robot to confirm them: ", margin, need) +
		b.more(need-margin, pair, b.o.PlaceM, h.spots) + ", or ties of " + b.third(s, h.a, h.b) + ", would settle it"
}

// opposed says why a tie is open that does not belong to the best set of its pair; own is the set it belongs to, -1 for none.
func (b *body) opposed(s *standing, own int) string {
	best := &s.f.hs[s.best]
	pair := b.pairName(best.a, best.b)
	text := "it "
	weight := 0
	from := best.spots
	if own >= 0 {
		h := &s.f.hs[own]
		text, weight, from = "its set rests "+b.rests(h)+" and ", len(h.spots), h.spots
	}
	text += fmt.Sprintf("contradicts another set between %s %s, which is open itself: ", pair, b.rests(best))
	return text + b.more(max(1, b.need(s, s.best)+len(best.spots)-weight), pair, b.o.PlaceM, from) + ", or ties of " + b.third(s, best.a, best.b) + ", would settle it"
}

// third names a robot that could bear witness between units u and v: one that shares a datum with one of them and has to meet the
// other, where there is any.
func (b *body) third(s *standing, u, v int) string {
	for _, p := range [2][2]int{{u, v}, {v, u}} {
		for w := range b.tracks {
			if w != u && w != v && s.island[w] == s.island[p[0]] {
				return fmt.Sprintf("%s, which shares a datum with %s, with %s", b.tracks[w].Name, b.tracks[p[0]].Name, b.tracks[p[1]].Name)
			}
		}
	}
	return "a third robot with both"
}
