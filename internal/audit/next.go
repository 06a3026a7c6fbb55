package audit

import (
	"cmp"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat"

	"selvage/internal/adjust"
	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/reliability"
	"selvage/internal/survey"
)

const (
	candidates = 300 // most that are looked at, spread over the site
	weakest    = 24  // ties that they are to serve
	named      = 5   // most that are told
)

// meeting is a pair of keyframes of two units within reach of each other.
type meeting struct {
	a, b  int32
	apart float64
	m     measurement
}

// next looks for the tie that is missing most. A tie measured between two places would have the sigmas that ties usually have; what it
// does to the weakest ties follows from the factor, without adjusting again: with X = J_k Q J_n' and S the covariance of what the
// map predicts for it plus its own, J_k Q J_k' falls by X S^-1 X'. Two ties of one place share one error of recognition, so a
// candidate counts for nothing at the place of the tie itself.
func (w *work) next() error {
	weak := w.weak()
	if len(weak) == 0 {
		return nil
	}
	near := w.meetings(w.reach(), weak)
	if len(near) == 0 {
		return nil
	}
	w.suppose(near)
	if err := w.again(); err != nil {
		return err
	}
	if err := w.covariance(); err != nil {
		return err
	}
	// What each candidate leaves of the detectable error of each weak tie; NaN where nothing would check it.
	left := make([][]float64, len(near))
	for i := range left {
		left[i] = make([]float64, len(weak))
	}
	const together = 8
	scalars := w.sigma.Scalars()
	vectors := make([]float64, min(together, len(weak))*w.d*scalars)
	for first := 0; first < len(weak); first += together {
		if err := w.ctx.Err(); err != nil {
			return err
		}
		batch := weak[first:min(first+together, len(weak))]
		columns := vectors[:len(batch)*w.d*scalars]
		clear(columns)
		for i, t := range batch {
			d := w.derivative(t.m)
			d.spread(w.sigma, columns[i*w.d*scalars:], scalars)
		}
		w.sigma.Apply(columns, len(batch)*w.d)
		for i, t := range batch {
			now := w.predicted(t.m)
			for n := range near {
				left[n][first+i] = w.after(t, now, &near[n], columns[i*w.d*scalars:], scalars)
			}
		}
	}
	w.rank(near, weak, left)
	return nil
}

// weak returns the ties that a further one is to serve: those that nothing checks, then those with the largest detectable errors.
func (w *work) weak() []*Tie {
	var out []*Tie
	for k := range w.out.Ties {
		if t := &w.out.Ties[k]; t.held && (t.Status == Unchecked || !math.IsInf(t.detectable(), 1)) {
			out = append(out, t)
		}
	}
	slices.SortStableFunc(out, func(a, b *Tie) int { return cmp.Compare(b.detectable(), a.detectable()) })
	return out[:min(len(out), weakest)]
}

// detectable is the largest detectable error in metres, across the line of sight for what measures angles alone; infinite where nothing
// checks the tie.
func (t *Tie) detectable() float64 {
	switch {
	case t.Status == Unchecked:
	case t.DetectableM != nil:
		return *t.DetectableM
	case t.DetectableRad != nil:
		return *t.DetectableRad * t.apart
	}
	return math.Inf(1)
}

// reach is how far apart two keyframes may be for a tie: 95 % of the ties of the survey are no longer.
func (w *work) reach() float64 {
	var lengths []float64
	for k := range w.s.Ties {
		if t := &w.out.Ties[k]; t.held && w.s.Ties[k].Kind == survey.WholePose {
			lengths = append(lengths, distance(w.s.Ties[k].Pose.T, [3]float64{}))
		} else if t.held {
			lengths = append(lengths, t.apart)
		}
	}
	slices.Sort(lengths)
	return max(1, stat.Quantile(0.95, stat.Empirical, lengths, nil))
}

// suppose adds the candidates to the graph with no weight, as ties of the kind that most held ties are, with the median sigmas of these.
func (w *work) suppose(near []meeting) {
	var count [survey.Bearing + 1]int
	kind := survey.WholePose
	for k := range w.s.Ties {
		if w.out.Ties[k].held {
			if count[w.s.Ties[k].Kind]++; count[w.s.Ties[k].Kind] > count[kind] {
				kind = w.s.Ties[k].Kind
			}
		}
	}
	usual := func(c int) float64 {
		var all []float64
		for k := range w.s.Ties {
			if t := &w.s.Ties[k]; w.out.Ties[k].held && t.Kind == kind {
				s := t.Cov.Sigma[c]
				if kind != survey.WholePose {
					s = t.Sight.Sigma[c]
				}
				if !math.IsInf(s, 1) {
					all = append(all, s)
				}
			}
		}
		if len(all) == 0 {
			return 0
		}
		slices.Sort(all)
		m := stat.Quantile(0.5, stat.Empirical, all, nil)
		return 1 / (m * m)
	}
	poses := w.p.Graph.Values.Poses
	if kind == survey.WholePose {
		var info [36]float64
		for c := range 6 {
			info[7*c] = usual(c)
		}
		for i := range near {
			m := &near[i]
			z := poses[m.a].Between(poses[m.b])
			if w.d == 3 {
				z = lie.Planar(&z).Spatial()
			}
			m.m = measurement{poses: w.b, k: w.b.Len()}
			w.b.Add(m.a, m.b, z, &info)
			*m.m.weight() = 0
		}
		return
	}
	var info lie.Mat3
	for c := range 3 {
		info[4*c] = usual(c)
	}
	set := w.p.Graph.AddEncounters(adjust.SenseOf(kind))
	for i := range near {
		m := &near[i]
		m.m = measurement{sights: set, k: set.Len()}
		set.Add(m.a, m.b, lie.Identity(), [3]float64{}, [3]float64{}, &info) // what it would measure does not matter
		*m.m.weight() = 0
	}
}

// meetings finds where tracks of two units of one island pass within reach of each other: around each weak tie the nearest ones that
// lie at another place, then the nearest pair for each two units and stretch of the site, stretches being as long as it takes for no
// more than [candidates] in all.
func (w *work) meetings(reach float64, weak []*Tie) []meeting {
	type spot struct {
		unit int32
		cell [3]int32
	}
	cellOf := func(p [3]float64, size float64) (c [3]int32) {
		for i := range c {
			c[i] = int32(math.Floor(p[i] / size))
		}
		return c
	}
	kept := map[spot]bool{} // one keyframe of a unit for each half of the reach
	grid := map[[3]int32][]int32{}
	var all []int32
	for v := range int32(len(w.p.Keys)) {
		at := w.p.Graph.Values.Poses[v].T
		s := spot{w.unit[v], cellOf(at, reach/2)}
		if !kept[s] {
			kept[s] = true
			all = append(all, v)
			c := cellOf(at, reach)
			grid[c] = append(grid[c], v)
		}
	}
	var pairs []meeting
	for _, a := range all {
		at := w.p.Graph.Values.Poses[a].T
		home := cellOf(at, reach)
		for o := range int32(27) {
			for _, b := range grid[[3]int32{home[0] + o%3 - 1, home[1] + o/3%3 - 1, home[2] + o/9 - 1}] {
				if w.unit[a] >= w.unit[b] || w.p.Island[a] != w.p.Island[b] {
					continue
				}
				if d := distance(at, w.p.Graph.Values.Poses[b].T); d <= reach {
					pairs = append(pairs, meeting{a: a, b: b, apart: d})
				}
			}
		}
	}
	out := w.around(pairs, weak)
	type stretch struct {
		a, b int32
		cell [3]int32
	}
	for size := 2 * reach; ; size *= 1.5 {
		best := map[stretch]int{}
		var order []stretch
		for i, m := range pairs {
			s := stretch{w.unit[m.a], w.unit[m.b], cellOf(w.p.Graph.Values.Poses[m.a].T, size)}
			at, seen := best[s]
			if !seen {
				order = append(order, s)
			}
			if !seen || m.apart < pairs[at].apart {
				best[s] = i
			}
		}
		if len(order) > candidates-len(out) && size < 1e9 {
			continue
		}
		for _, s := range order[:min(len(order), candidates-len(out))] {
			out = append(out, pairs[best[s]])
		}
		return out
	}
}

// around picks, for each weak tie, the five meetings nearest to it that are not at its place.
func (w *work) around(pairs []meeting, weak []*Tie) []meeting {
	type choice struct {
		pair int
		far  float64
	}
	var out []meeting
	taken := map[int]bool{}
	for _, t := range weak {
		var best []choice
		for i := range pairs {
			far := distance(w.p.Graph.Values.Poses[t.i].T, w.p.Graph.Values.Poses[pairs[i].a].T)
			if len(best) == 5 && far >= best[4].far || taken[i] || w.onePlace(t, &pairs[i]) {
				continue
			}
			best = append(best, choice{i, far})
			slices.SortStableFunc(best, func(a, b choice) int { return cmp.Compare(a.far, b.far) })
			best = best[:min(len(best), 5)]
		}
		for _, c := range best {
			taken[c.pair] = true
			out = append(out, pairs[c.pair])
		}
	}
	return out
}

// after returns the detectable error of t with the candidate measured, given what the map predicts for t and the vectors Q J' of it;
// NaN where nothing would check it.
func (w *work) after(t *Tie, now []float64, m *meeting, vectors []float64, scalars int) float64 {
	if w.onePlace(t, m) {
		if t.Status == Unchecked {
			return math.NaN()
		}
		return t.detectable()
	}
	n := len(t.Parts)
	cand := w.derivative(m.m)
	d := cand.rows
	x := mat.NewDense(d, n, cand.gather(w.sigma, vectors, scalars, n)) // J_n Q J_k'
	s := mat.NewSymDense(d, nil)
	p, info := w.predicted(m.m), w.info(m.m)
	for i := range d {
		for j := i; j < d; j++ {
			s.SetSym(i, j, p[i*d+j])
		}
		if info[i*(d+1)] > 0 {
			s.SetSym(i, i, p[i*(d+1)]+1/info[i*(d+1)])
		} else {
			s.SetSym(i, i, math.Inf(1))
		}
	}
	for i := range d { // what it does not measure says nothing
		if math.IsInf(s.At(i, i), 1) {
			for j := range d {
				s.SetSym(i, j, 0)
			}
			for j := range n {
				x.Set(i, j, 0)
			}
			s.SetSym(i, i, 1)
		}
	}
	var chol mat.Cholesky
	var y, fall mat.Dense
	if !chol.Factorize(s) || chol.SolveTo(&y, x) != nil {
		return t.detectable()
	}
	fall.Mul(x.T(), &y)
	then := slices.Clone(now)
	for i := range then {
		then[i] -= fall.RawMatrix().Data[i]
	}
	f := reliability.Assess(make([]float64, n), w.info(t.m), then)
	later := Tie{DetectableM: largest(f.Detectable[:w.metres(t.m)]), DetectableRad: largest(f.Detectable[w.metres(t.m):]), apart: t.apart}
	if worst := later.detectable(); !math.IsInf(worst, 1) {
		return worst
	}
	return math.NaN()
}

// onePlace reports whether a candidate lies at the place of a tie, seen from either end.
func (w *work) onePlace(t *Tie, m *meeting) bool {
	reach := evidence.DefaultOptions(w.out.Dimension).PlaceM
	at := func(v int32) [3]float64 { return w.p.Graph.Values.Poses[v].T }
	for _, u := range [2]int32{t.i, t.j} {
		if distance(at(u), at(m.a)) <= reach || distance(at(u), at(m.b)) <= reach {
			return true
		}
	}
	return false
}

// rank names the best candidates: those that leave the fewest ties unchecked, then the smallest detectable error at worst, then those
// that serve one tie best. Two units are named once.
func (w *work) rank(near []meeting, weak []*Tie, left [][]float64) {
	type score struct {
		c         Candidate
		gain      float64
		unchecked int
		units     [2]int32
	}
	var all []score
	for n := range near {
		m := &near[n]
		s := score{units: [2]int32{w.unit[m.a], w.unit[m.b]}}
		s.c = Candidate{A: keyframe(w.p.Keys[m.a]), B: keyframe(w.p.Keys[m.b]), ApartM: m.apart}
		for i, t := range weak {
			x := left[n][i]
			if math.IsNaN(x) {
				s.unchecked++
				continue
			}
			s.c.LargestM = max(s.c.LargestM, x)
			gain := math.Log(t.detectable() / x)
			if gain > s.gain || math.IsInf(gain, 1) && x < s.c.AfterM {
				s.gain, s.c.Helps, s.c.AfterM, s.c.BeforeM = gain, t.ID, x, nil
				if now := t.detectable(); !math.IsInf(now, 1) {
					s.c.BeforeM = &now
				}
			}
		}
		if s.gain > 0.1 {
			s.c.Unchecked = s.unchecked
			all = append(all, s)
		}
	}
	slices.SortStableFunc(all, func(a, b score) int {
		return cmp.Or(cmp.Compare(a.unchecked, b.unchecked), cmp.Compare(a.c.LargestM, b.c.LargestM), cmp.Compare(b.gain, a.gain))
	})
	told := map[[2]int32]bool{}
	for _, s := range all {
		if len(w.out.Next) < named && !told[s.units] {
			told[s.units] = true
			w.out.Next = append(w.out.Next, s.c)
		}
	}
}
