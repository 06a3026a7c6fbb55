package agent

import (
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/msgs"
)

// bent is a correction of number n that moves the robot into a datum and bends it there: every junction of the newest summary is
// a little off where the robot has it.
func bent(a *Agent, version, n uint64) *msgs.Correction {
	rng := rand.New(rand.NewPCG(n, 2))
	c := &msgs.Correction{
		Fleet: "fleet", Robot: "r1", Epoch: msgs.Epoch{Incarnation: 1, Number: n}, Term: 1, SummaryVersion: version, Dim: a.width(),
	}
	datum := lie.Exp(lie.Tangent{100, -50, 0, 0, 0, 2})
	if a.cfg.Dim == 3 {
		datum = lie.Exp(lie.Tangent{100, -50, 20, 0.5, -1, 2})
	}
	for _, s := range a.sessions {
		if s.told == nil {
			continue
		}
		p := msgs.CorrectedPart{Session: s.id, Joined: true, Island: "x", DatumFromSession: wirePose(&datum, a.cfg.Dim)}
		n := s.told.poses()
		junctions := slices.Clone(s.told.condensed.Junctions[:n])
		slices.SortFunc(junctions, func(v, w int32) int { return int(s.keys[v] - s.keys[w]) })
		for _, v := range junctions {
			x := motion(datum.Mul(s.graph.Values.Poses[v]), rng, a.cfg.Dim, 0.05, 0.02)
			p.IDs = append(p.IDs, s.keys[v])
			p.Poses = append(p.Poses, wirePose(&x, a.cfg.Dim))
		}
		for _, v := range s.told.condensed.Junctions[n:] {
			m := s.told.marks[s.told.point(v)]
			at := s.graph.Values.Points[s.marks[m].point]
			for i := range a.cfg.Dim {
				at[i] += 0.05 * rng.NormFloat64()
			}
			p.Points = append(p.Points, msgs.Point{Mark: s.marks[m].name, At: datum.Apply(at)})
		}
		slices.SortFunc(p.Points, func(a, b msgs.Point) int { return strings.Compare(a.Mark, b.Mark) })
		c.Parts = append(c.Parts, p)
	}
	return c
}

// apart is the largest component of the twist between poses.
func apart(x, y []lie.SE3) (worst float64) {
	for k := range x {
		d := x[k].Between(y[k])
		for _, v := range d.Log() {
			worst = max(worst, v, -v)
		}
	}
	return worst
}

// TestInteriorFollows: after a correction junctions are where the base has them, and the interior is the optimum given these: the
// twin finds the same from where the front end had it.
func TestInteriorFollows(t *testing.T) {
	for _, dim := range []int{2, 3} {
		r := newRobot(t, dim)
		r.walk(1, 0, 65, 3)
		for _, id := range []int64{5, 20, 33, 50} {
			r.see(1, id)
		}
		r.tick(1)
		s := r.sessions[0]
		c := bent(r.Agent, 1, 1)
		if _, err := r.hear(msgs.KindCorrection, c); err != nil {
			t.Fatal(err)
		}
		track := r.Tracks()[0]
		p := &c.Parts[0]
		var fixed []int32
		var got, want []lie.SE3
		for k, id := range p.IDs {
			v := s.index[id]
			fixed = append(fixed, v)
			got = append(got, track.DatumFromSession.Mul(track.Poses[v]))
			want = append(want, lie.FromQuat(p.Poses[k].T, p.Poses[k].Q))
		}
		if off := apart(got, want); off > 1e-10 || !track.Joined || track.Island != "x" {
			t.Errorf("dimension %d: junctions off by %g, joined %v to %q", dim, off, track.Joined, track.Island)
		}
		twin := posegraph.New(s.graph.Dim, slices.Clone(s.front))
		for _, v := range fixed {
			twin.Values.Poses[v] = track.Poses[v]
		}
		between := twin.AddBetween()
		for k := range s.factors.Len() {
			info := sigmas(0.02, 0.01)
			between.Add(s.factors.I[k], s.factors.J[k], s.factors.Z[k], &info)
		}
		if err := posegraph.Chordal(twin, fixed); err != nil {
			t.Fatal(err)
		}
		solver, err := posegraph.NewSolver(twin, fixed, sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		o := posegraph.DefaultOptions()
		o.Tolerance = 1e-16
		solver.Optimise(o)
		if off := apart(track.Poses, twin.Values.Poses); off > 1e-7 {
			t.Errorf("dimension %d: the interior is off by %g", dim, off)
		}
	}
}

// TestCorrectionsInAnyOrder: what is old, repeated, for somebody else, of another dimension or of a deposed base changes nothing
// that can be seen; unknown sessions and ids are left out.
func TestCorrectionsInAnyOrder(t *testing.T) {
	r := newRobot(t, 2)
	r.walk(1, 0, 45, 3)
	for _, id := range []int64{5, 20, 40} {
		r.see(1, id)
	}
	r.tick(1)
	take := func(c *msgs.Correction) error {
		_, err := r.hear(msgs.KindCorrection, c)
		return err
	}
	older, newer := bent(r.Agent, 1, 6), bent(r.Agent, 1, 7)
	newer.Term = 4
	newer.Parts[0].IDs = append(newer.Parts[0].IDs, 1000)
	newer.Parts[0].Poses = append(newer.Parts[0].Poses, newer.Parts[0].Poses[0])
	stranger := newer.Parts[0]
	stranger.Session = 77
	newer.Parts = append(newer.Parts, stranger)
	if err := take(newer); err != nil {
		t.Fatal(err)
	}
	older.Term = 4
	before := fingerprint(r.Agent)
	if r.Applied() != newer.Epoch || len(r.Tracks()) != 1 || len(r.Tracks()[0].IDs) != 45 {
		t.Fatalf("applied %v, tracks %v", r.Applied(), r.Tracks())
	}
	for _, c := range []*msgs.Correction{older, newer} {
		if err := take(c); err != nil {
			t.Error(err)
		}
	}
	for name, spoil := range map[string]func(c *msgs.Correction){
		"robot":     func(c *msgs.Correction) { c.Robot = "r2" },
		"fleet":     func(c *msgs.Correction) { c.Fleet = "other" },
		"term":      func(c *msgs.Correction) { c.Term = 3 },
		"dimension": func(c *msgs.Correction) { c.Dim, c.Parts = 6, nil },
	} {
		c := bent(r.Agent, 1, 9)
		c.Term = 5
		spoil(c)
		if err := take(c); err == nil {
			t.Errorf("a correction of another %s was taken", name)
		}
		if r.term != 4 {
			t.Errorf("a refused correction of another %s set the term to %d", name, r.term)
		}
	}
	if after := fingerprint(r.Agent); after != before {
		t.Errorf("after\n%s\nbefore\n%s", after, before)
	}
	next := bent(r.Agent, 1, 1)
	next.Epoch.Incarnation, next.Term = 2, 4
	if err := take(next); err != nil || r.Applied() != next.Epoch {
		t.Errorf("epoch 1 of a new base: applied %v, %v", r.Applied(), err)
	}
}

// TestChangeIsNeverTooSmall: what condensing again is said to be worth is no less than what it is worth to a fleet that holds the
// robot by springs at its junctions, and where these are weak it is just that.
func TestChangeIsNeverTooSmall(t *testing.T) {
	for _, dim := range []int{2, 3} {
		for _, sigma := range []float64{0.02, 0.2, 2} {
			r := newRobot(t, dim)
			r.walk(1, 0, 65, 3)
			for _, id := range []int64{5, 20, 33, 50, 64} {
				r.see(1, id)
			}
			r.tick(1)
			s := r.sessions[0]
			told := s.told
			first := held(s, told, dim, sigma)
			first.solve(t)
			p := msgs.CorrectedPart{Session: 1, DatumFromSession: msgs.Pose{Q: [4]float64{3: 1}}}
			for k, v := range told.condensed.Junctions {
				p.IDs = append(p.IDs, s.keys[v])
				p.Poses = append(p.Poses, wirePose(&first.Values.Poses[k], dim))
			}
			if err := s.follow(&p); err != nil {
				t.Fatal(err)
			}
			next, err := s.model()
			if err != nil {
				t.Fatal(err)
			}
			fall, ok := s.change(next)
			second := held(s, next, dim, sigma)
			copy(second.Values.Poses, first.Values.Poses)
			worth := second.Cost() - second.solve(t)
			if !ok || !(fall >= worth*(1-1e-3)) || !(worth > 0) {
				t.Errorf("dimension %d, springs of %g m: fall %g (%v), true %g", dim, sigma, fall, ok, worth)
			}
			if sigma == 2 && fall > 1.1*worth {
				t.Errorf("dimension %d: fall %g, true only %g", dim, fall, worth)
			}
		}
	}
}

// held is a model held by springs at its junctions: the fleet around it.
type heldModel struct {
	*posegraph.Graph
	fixed []int32
}

func held(s *session, m *model, dim int, sigma float64) heldModel {
	g := m.graph(s.graph.Dim, &m.at)
	n := len(g.Values.Poses)
	rng := rand.New(rand.NewPCG(5, 5))
	springs := g.AddBetween()
	info := sigmas(sigma, sigma)
	h := heldModel{Graph: g}
	for k := range n {
		x := motion(s.told.at.Poses[s.told.condensed.Junctions[k]], rng, dim, 0.2, 0.05)
		g.Values.Poses = append(g.Values.Poses, x)
		h.fixed = append(h.fixed, int32(n+k))
		springs.Add(int32(n+k), int32(k), lie.Identity(), &info)
	}
	return h
}

func (h *heldModel) solve(t *testing.T) float64 {
	solver, err := posegraph.NewSolver(h.Graph, h.fixed, sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	return solver.Optimise(posegraph.DefaultOptions()).Cost
}
