package evidence

import "math"

// odds is what chance has to do with the answer for one pair of units.
type odds struct {
	places, of int     // that agree with the answer, of so many
	least      int     // that make an answer up
	spot       float64 // chance that an unrelated place agrees too
	span       float64 // chance that those which make it up are as far apart in both frames
	line       bool    // they all lie along one line, which in space is no answer
}

// odds compares the gate of the glimpses with the extent of what the two units have seen. Only the horizontal counts, for unrelated
// places may well have the same floor under them.
func (f *framing) odds(all []Glimpse, places int, variance float64, o Options) odds {
	every := make([]int, len(all))
	for i := range all {
		every[i] = i
	}
	long, short := extent(all)
	gate := math.Sqrt(f.o.Bound * variance)
	m, marks := f.places(all, every, o)
	x := odds{places: places, of: max(m+marks, places), least: f.least(all[0].A, all[0].B)}
	x.span = math.Min(1, 2*gate/long)
	x.spot = math.Max(x.span*math.Min(1, 2*gate/short), 1e-12)
	return x
}

// together is the expected number of answers as good as this among unrelated glimpses of several pairs that one answer is for, two
// groups of units being joined by it: beyond the places that make an answer up, each falls by accident into its gate. Those that make it
// up are taken where that is least likely.
func together(all []*odds) float64 {
	sum, rarest, span, least, places := 0.0, 0.0, 0.0, 0, 0
	line := true
	for _, x := range all {
		a, _ := math.Lgamma(float64(x.of + 1))
		b, _ := math.Lgamma(float64(x.places + 1))
		c, _ := math.Lgamma(float64(x.of - x.places + 1))
		sum += a - b - c + float64(x.places)*math.Log(x.spot)
		rarest = math.Min(rarest, math.Log(x.spot))
		span, least = math.Max(span, x.span), max(least, x.least)
		places += x.places
		line = line && x.line
	}
	if line {
		return math.Inf(1)
	}
	if places < 2 {
		return 1
	}
	return math.Exp(sum-float64(min(least, places))*rarest) * span
}

// pool joins groups of units, the surest first, by all meetings between them that agree: none needs to stand alone. Rivals of all count
// against them, as if one answer were behind them.
func (m *Met) pool(units int, o Options) {
	for {
		type pair struct{ a, b int }
		between := map[pair][]int{}
		var order []pair
		for i := range m.Meetings {
			x := &m.Meetings[i]
			a, b := m.Group[x.A], m.Group[x.B]
			if a == b {
				continue
			}
			p := pair{min(a, b), max(a, b)}
			if between[p] == nil {
				order = append(order, p)
			}
			between[p] = append(between[p], i)
		}
		best, least := pair{}, o.Chance
		for _, p := range order {
			margin := 0
			var all []*odds
			for _, i := range between[p] {
				margin += m.Meetings[i].Margin
				all = append(all, &m.Meetings[i].odds)
			}
			if chance := float64(len(order)) * together(all); margin >= o.BridgeMargin && len(all) > 1 && chance <= least {
				best, least = p, chance
			}
		}
		if best == (pair{}) {
			break
		}
		for _, i := range between[best] {
			m.Meetings[i].Held, m.Meetings[i].Cycle = true, true
		}
		m.Group = m.connect(units, -1)
	}
	for i := range m.Meetings { // what agrees inside a group is part of it
		if x := &m.Meetings[i]; !x.Held && m.Group[x.A] == m.Group[x.B] && x.Margin > 0 && !x.odds.line {
			x.Held, x.Cycle = true, true
		}
	}
}
