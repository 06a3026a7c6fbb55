package partition

import (
	"math"
	"slices"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
)

const keyframes = 90

// index is the place of a robot's keyframe in the joint list.
func index(robot int, key int32) int32 { return int32(robot)*keyframes + key }

// tieLinks returns the true ties between places of the joint list.
func (s *site) tieLinks() (out []link) {
	for _, k := range s.ties {
		if k.genuine {
			out = append(out, link{index(k.a, k.keyA), index(k.b, k.keyB), k.z, k.omega})
		}
	}
	return out
}

// links returns all measurements between places of the joint list, those of one robot after the other, then the true ties.
func (s *site) links() (out []link) {
	for r, g := range s.robots {
		for _, l := range g.links {
			out = append(out, link{index(r, l.from), index(r, l.to), l.z, l.omega})
		}
	}
	return append(out, s.tieLinks()...)
}

// align brings the robots into the frame of robot 0 by the first true tie to a robot already there.
func (s *site) align() []lie.SE3 {
	poses := slices.Clone(s.robots[0].poses)
	for r := 1; r < 3; r++ {
		for _, k := range s.ties {
			if k.genuine && k.a == 0 && k.b == r {
				g := s.robots[r]
				T := s.robots[0].poses[k.keyA].Mul(k.z).Mul(g.poses[k.keyB].Inv())
				poses = append(poses, g.moved(T).poses...)
				break
			}
		}
	}
	return poses
}

func TestSiteCentralOptimum(t *testing.T) {
	s := readSite(t)
	for _, g := range s.robots {
		optimise(t, g.poses, g.links, []int32{0})
	}
	poses := s.align()
	cost := optimise(t, poses, s.links(), []int32{0})
	relatively(t, "central cost", cost, 38.8085219845, 1e-8)
	if dof := 6 * (len(s.links()) - len(poses) + 1); dof != 72 {
		t.Errorf("%d degrees of freedom, expected 72", dof)
	}
	x := poses[index(0, 0)].Between(poses[index(1, 0)])
	got := x.Log()
	for i, want := range []float64{-7.049804886, 20.62761293, -.3122304986, -.04078076838, -.000595484366, -1.575640641} {
		absolutely(t, "robot 1 seen from robot 0", got[i], want, 1e-5)
	}
	x = poses[index(0, 0)].Between(poses[index(2, 89)])
	got = x.Log()
	for i, want := range []float64{-7.921963021, 6.926428661, .001505788164, -.05713478776, -.02348833224, -1.589963415} {
		absolutely(t, "robot 2 seen from robot 0", got[i], want, 1e-5)
	}
}

// A round: every robot condenses at its present poses, the coordinator adjusts the junctions, every robot moves its interior. The
// cost of all measurements comes down to that of the adjustment in one piece, by the measured factors.
func TestSiteRounds(t *testing.T) {
	for _, c := range []struct {
		name   string
		follow func(t *testing.T, s *site, summaries []*Condensed, poses, junctions []lie.SE3)
		dense  bool
		gaps   []float64 // relative, after each round; the first to a factor of two, the others as bounds
	}{
		{"interior adjusted again", followByAdjustment, false, []float64{2.51e-7, 1e-11}},
		{"interior by back-substitution", followBySubstitution, false, []float64{1.16e-6, 1e-10}},
		{"one dense clique", followByAdjustment, true, []float64{8.98e-6, 7.3e-10}},
	} {
		t.Run(c.name, func(t *testing.T) {
			s := readSite(t)
			for _, g := range s.robots {
				optimise(t, g.poses, g.links, []int32{0})
			}
			poses := s.align()
			central := slices.Clone(poses)
			best := optimise(t, central, s.links(), []int32{0})
			for round, gap := range c.gaps {
				summaries := make([]*Condensed, 3)
				for r, g := range s.robots {
					h := &graph{6, poses[r*keyframes:][:keyframes], g.links}
					summaries[r] = condense(t, h, h.linearise(), s.separators(r))
					if c.dense {
						summaries[r] = asOneClique(h, summaries[r])
					}
				}
				junctions := coordinate(t, s, summaries, poses)
				c.follow(t, s, summaries, poses, junctions)
				got := s.costOf(poses)/best - 1
				t.Logf("round %d: gap %.3g", round+1, got)
				if !(got < 2*gap) || round == 0 && !(got > gap/2) || !(got > -1e-13) {
					t.Errorf("round %d: gap %.3g, expected %.3g", round+1, got, gap)
				}
			}
		})
	}
}

func (s *site) costOf(poses []lie.SE3) float64 {
	g := posegraph.New(6, poses)
	addLinks(g, s.links())
	return g.Cost()
}

// asOneClique replaces the cliques of a summary by a single one over all its junctions.
func asOneClique(g *graph, c *Condensed) *Condensed {
	terms := g.expand(c)
	H, b := dense(6, len(g.poses), terms)
	n := 6 * len(g.poses)
	q := Clique{Nodes: c.Junctions}
	for _, v := range c.Junctions[1:] {
		for i := 6 * int(v); i < 6*int(v)+6; i++ {
			q.B = append(q.B, b[i])
			q.H = append(q.H, restrict(6, len(g.poses), H[i*n:][:n], c.Junctions[1:])...)
		}
	}
	return &Condensed{Junctions: c.Junctions, Cliques: []Clique{q}}
}

// coordinate adjusts the junctions of all robots to their cliques and the true ties; other poses stay.
func coordinate(t *testing.T, s *site, summaries []*Condensed, poses []lie.SE3) []lie.SE3 {
	t.Helper()
	g := posegraph.New(6, slices.Clone(poses))
	addLinks(g, s.tieLinks())
	cliques := g.AddCliques()
	fixed := []int32{index(0, summaries[0].Junctions[0])}
	for r, c := range summaries {
		for _, q := range c.Cliques {
			nodes := make([]int32, len(q.Nodes))
			at := make([]lie.SE3, len(q.Nodes))
			for i, v := range q.Nodes {
				nodes[i] = index(r, v)
				at[i] = poses[nodes[i]]
			}
			cliques.Add(nodes, at, q.H, q.B)
		}
		for v := int32(0); v < keyframes; v++ {
			if !slices.Contains(c.Junctions, v) {
				fixed = append(fixed, index(r, v))
			}
		}
	}
	out := slices.Clone(poses)
	solve(t, g, fixed, out)
	return out
}

// followByAdjustment adjusts each robot's own measurements with its junctions where the coordinator put them.
func followByAdjustment(t *testing.T, s *site, summaries []*Condensed, poses, junctions []lie.SE3) {
	for r, g := range s.robots {
		own := poses[r*keyframes:][:keyframes]
		for _, v := range summaries[r].Junctions {
			own[v] = junctions[index(r, v)]
		}
		optimise(t, own, g.links, summaries[r].Junctions)
	}
}

// followBySubstitution lets each robot's interior follow its junctions to first order. The robot is first moved as a whole onto
// its corrected junctions' first, so that steps are small.
func followBySubstitution(t *testing.T, s *site, summaries []*Condensed, poses, junctions []lie.SE3) {
	for r := range s.robots {
		own := poses[r*keyframes:][:keyframes]
		c := summaries[r]
		first := c.Junctions[0]
		T := junctions[index(r, first)].Mul(own[first].Inv())
		steps := make([]float64, 6*keyframes)
		for v := range own {
			own[v] = T.Mul(own[v])
		}
		for _, v := range c.Junctions {
			x := own[v].Between(junctions[index(r, v)])
			step := x.Log()
			copy(steps[6*v:], step[:])
		}
		c.Interior(steps)
		for v := range own {
			own[v] = own[v].Plus(lie.Tangent(steps[6*v:][:6]))
		}
	}
}

// The determinant of the coordinator's matrix at the optimum, first junction fixed.
func TestSiteCoordinatorMatrix(t *testing.T) {
	s := readSite(t)
	for _, g := range s.robots {
		optimise(t, g.poses, g.links, []int32{0})
	}
	poses := s.align()
	optimise(t, poses, s.links(), []int32{0})
	var terms []Quadratic
	var kept []int32
	for r, g := range s.robots {
		h := &graph{6, poses[r*keyframes:][:keyframes], g.links}
		c := condense(t, h, h.linearise(), s.separators(r))
		for _, q := range h.expand(c) {
			nodes := make([]int32, len(q.Nodes))
			for i, v := range q.Nodes {
				nodes[i] = index(r, v)
			}
			terms = append(terms, Quadratic{nodes, q.H, q.B})
		}
		for _, v := range c.Junctions {
			kept = append(kept, index(r, v))
		}
	}
	all := &graph{6, poses, s.tieLinks()}
	terms = append(terms, all.linearise()...)
	got := logDet(t, oneClique(all, terms, kept))
	if e := math.Abs(got - 1273.807548); !(e < 1e-4) {
		t.Errorf("log det %.9g, expected 1273.807548", got)
	}
}
