package posegraph

import (
	"testing"

	"pgregory.net/rapid"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// The sparse system of random graphs equals the dense one built factor by factor: slots of either sign, repeated pairs, fixed
// variables anywhere, several batches.
func TestAssembly(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			n := rapid.IntRange(1, 10).Draw(t, "poses")
			g := sample(r, dim, n, 0.3, rapid.Bool().Draw(t, "cliques"))
			fixed := fixSome(r, n)
			s := solver(t, g, fixed)
			w := twin(g, fixed)
			cost, gradient := s.Linearise()
			near(t, "cost", []float64{cost, g.Cost()}, []float64{w.cost, w.cost}, 1e-11, 1)
			near(t, "gradient", gradient, w.g, 1e-7, 1)
			for k := range w.size {
				row := make([]float64, w.size)
				for j := range row {
					row[j] = w.h.At(k, j)
				}
				near(t, "row of the matrix", column(s, k), row, 1e-7, 10)
			}
		})
	})
}

// A weight multiplies a factor; weight zero is as good as no factor.
func TestWeights(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(3)
		g := sample(r, dim, 5, 0.3, false)
		s := solver(t, g, []int32{0})
		one, gradient := s.Linearise()
		kept := append([]float64(nil), gradient...)
		for _, set := range g.Sets {
			b := set.(*Between)
			for k := range b.W {
				b.W[k] *= 3
			}
		}
		three, gradient := s.Linearise()
		near(t, "cost", []float64{three, g.Cost()}, []float64{3 * one, 3 * one}, 1e-12, 1)
		for i := range kept {
			kept[i] *= 3
		}
		near(t, "gradient", gradient, kept, 1e-12, 1)
		for _, set := range g.Sets {
			clear(set.(*Between).W)
		}
		none, gradient := s.Linearise()
		near(t, "nothing", append(gradient, none, g.Cost()), make([]float64, len(gradient)+2), 0, 0)
	})
}

func TestComponentsAndAnchors(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(0, 12).Draw(t, "poses")
		g := New(3, make([]lie.SE3, n))
		b := g.AddBetween()
		label := make([]int, n) // brute force: spread the lowest number until nothing changes
		for i := range label {
			label[i] = i
		}
		if n > 1 {
			for range rapid.IntRange(0, 12).Draw(t, "factors") {
				i, j := rapid.IntRange(0, n-1).Draw(t, "i"), rapid.IntRange(0, n-1).Draw(t, "j")
				if i != j {
					b.Add(int32(i), int32(j), lie.Identity(), &[36]float64{})
				}
			}
		}
		for changed := true; changed; {
			changed = false
			for k := range b.I {
				if low := min(label[b.I[k]], label[b.J[k]]); label[b.I[k]] != low || label[b.J[k]] != low {
					label[b.I[k]], label[b.J[k]], changed = low, low, true
				}
			}
		}
		component, count := g.Components()
		anchors := g.Anchors()
		if len(anchors) != count {
			t.Fatalf("%d anchors of %d components", len(anchors), count)
		}
		for i := range n {
			if int(anchors[component[i]]) != label[i] {
				t.Fatalf("pose %d: anchor %d, want %d", i, anchors[component[i]], label[i])
			}
		}
	})
}

func TestMistakesPanic(t *testing.T) {
	panics(t, "dimension 2", func() { New(2, nil) })
	for _, pair := range [][2]int32{{0, 0}, {0, 2}, {-1, 0}} {
		panics(t, "factor out of range", func() {
			g := New(3, make([]lie.SE3, 2))
			g.AddBetween().Add(pair[0], pair[1], lie.Identity(), &[36]float64{})
			_, _ = NewSolver(g, []int32{0}, sparse.Options{})
		})
	}
	panics(t, "fixed out of range", func() { _, _ = NewSolver(New(3, make([]lie.SE3, 2)), []int32{2}, sparse.Options{}) })
	if _, err := NewSolver(New(3, make([]lie.SE3, 2)), nil, sparse.Options{}); err != ErrNoFixed {
		t.Errorf("nothing fixed: %v", err)
	}
}
