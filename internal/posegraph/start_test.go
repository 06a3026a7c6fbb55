package posegraph

import (
	"slices"
	"testing"

	"pgregory.net/rapid"

	"selvage/internal/lie"
)

// islands is an error-free graph of several components, its truth kept apart; fixed holds at least one pose of each, anywhere, at
// its true place. All other poses start as zero, so nothing can come from them.
func islands(seed uint64, dim, count int) (g *Graph, truth []lie.SE3, fixed []int32) {
	r := random(seed)
	g = New(dim, nil)
	a, b := g.AddBetween(), g.AddBetween()
	for range count {
		first, n := len(truth), 1+r.IntN(6)
		for range n {
			truth = append(truth, turned(r, dim, 20, 3.14159*r.Float64()))
		}
		add := func(i, j int) {
			info := information(r)
			if r.IntN(2) == 0 {
				i, j = j, i
			}
			[]*Between{a, b}[r.IntN(2)].Add(int32(i), int32(j), truth[i].Between(truth[j]), &info)
		}
		for k := first + 1; k < first+n; k++ {
			add(first+r.IntN(k-first), k)
		}
		for range n - 1 {
			if i, j := first+r.IntN(n), first+r.IntN(n); i != j {
				add(i, j)
			}
		}
		fixed = append(fixed, int32(first+r.IntN(n)))
		if r.IntN(3) == 0 {
			fixed = append(fixed, int32(first+r.IntN(n)))
		}
	}
	g.Values.Poses = make([]lie.SE3, len(truth))
	for _, f := range fixed {
		g.Values.Poses[f] = truth[f]
	}
	return g, truth, fixed
}

// Both starts are exact without errors: rotations up to half a turn, several components, fixed poses anywhere and not identity,
// measurements either way round.
func TestStartsAreExact(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			seed := rapid.Uint64().Draw(t, "seed")
			count := rapid.IntRange(1, 4).Draw(t, "components")
			g, truth, fixed := islands(seed, dim, count)
			if err := Chordal(g, fixed); err != nil {
				t.Fatal(err)
			}
			samePoses(t, "chordal", g.Values.Poses, truth, 1e-6)
			planarOnly(t, dim, g.Values.Poses)
			g, truth, fixed = islands(seed, dim, count)
			SpanningTree(g, fixed)
			samePoses(t, "tree", g.Values.Poses, truth, 1e-10)
			planarOnly(t, dim, g.Values.Poses)
		})
	})
}

func planarOnly(t failer, dim int, poses []lie.SE3) {
	if dim == 6 {
		return
	}
	for i, x := range poses {
		if x != lie.Planar(&x).Spatial() {
			t.Fatalf("pose %d left the plane: %v", i, x)
		}
	}
}

// Poses that no measurement reaches keep their values in a tree and are an error of the chordal start.
func TestStartsWithoutAWay(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		g := loop(dim)
		x := turned(random(9), dim, 3, 1)
		g.Values.Poses = append(g.Values.Poses, x)
		before := slices.Clone(g.Values.Poses)
		SpanningTree(g, []int32{0})
		if g.Values.Poses[3] != x {
			t.Error("tree: a pose out of reach moved")
		}
		if g.Values.Poses[1] == before[1] && g.Values.Poses[2] == before[2] {
			t.Error("tree: no pose was placed")
		}
		if Chordal(g, []int32{0}) == nil {
			t.Error("chordal: a pose out of reach is no error")
		}
		if Chordal(g, nil) != ErrNoFixed {
			t.Error("chordal: nothing fixed is no error")
		}
		before = slices.Clone(g.Values.Poses)
		if err := Chordal(g, []int32{0, 1, 2, 3}); err != nil || !slices.Equal(before, g.Values.Poses) {
			t.Errorf("chordal: all fixed: %v", err)
		}
	})
}

// Weight zero is no way: the tree goes round, the chordal start takes no notice of a false measurement.
func TestStartsHeedWeights(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(11)
		truth := []lie.SE3{turned(r, dim, 5, 2), turned(r, dim, 5, 2), turned(r, dim, 5, 2)}
		for name, start := range map[string]func(*Graph) error{
			"tree":    func(g *Graph) error { SpanningTree(g, []int32{0}); return nil },
			"chordal": func(g *Graph) error { return Chordal(g, []int32{0}) },
		} {
			g := New(dim, []lie.SE3{truth[0], lie.Identity(), lie.Identity()})
			b := g.AddBetween()
			info := information(r)
			b.Add(0, 2, turned(r, dim, 5, 2), &info)
			b.Add(0, 1, truth[0].Between(truth[1]), &info)
			b.Add(2, 1, truth[2].Between(truth[1]), &info)
			b.W[0] = 0
			if err := start(g); err != nil {
				t.Fatal(err)
			}
			samePoses(t, name, g.Values.Poses, truth, 1e-8)
		}
	})
}

// With errors the chordal start is close enough for the optimum, which does not depend on where a start put the poses.
func TestStartsLeadToOneOptimum(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		for seed := range uint64(10) {
			var costs []float64
			for _, start := range []func(*Graph){
				func(*Graph) {},
				func(g *Graph) {
					if err := Chordal(g, []int32{1}); err != nil {
						t.Fatal(err)
					}
				},
				func(g *Graph) { SpanningTree(g, []int32{1}) },
			} {
				g := sample(random(seed), dim, 8, 0.02, false)
				start(g)
				costs = append(costs, solver(t, g, []int32{1}).Optimise(DefaultOptions()).Cost)
			}
			near(t, "costs", costs, []float64{costs[0], costs[0], costs[0]}, 1e-9, 1)
		}
	})
}

// A solver's own chordal start is the start of its graph, whatever other factors it holds; a start leaves solvers of the graph alone.
func TestChordalOfASolver(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		for seed := range uint64(5) {
			a, b := sample(random(seed), dim, 9, 0.05, true), sample(random(seed), dim, 9, 0.05, true)
			fixed := []int32{4, 2}
			s := solver(t, a, fixed)
			if err := s.Chordal(); err != nil {
				t.Fatal(err)
			}
			bound := solver(t, b, fixed)
			if err := Chordal(b, fixed); err != nil {
				t.Fatal(err)
			}
			samePoses(t, "poses", a.Values.Poses, b.Values.Poses, 1e-9)
			_, got := bound.Linearise()
			near(t, "gradient after a start", got, twin(b, fixed).g, 1e-6, 1)
			if _, got = s.Linearise(); len(got) != 7*dim {
				t.Errorf("%d scalars", len(got))
			}
			near(t, "gradient after the solver's start", got, twin(a, fixed).g, 1e-6, 1)
		}
	})
}
