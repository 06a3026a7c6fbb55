package partition

import (
	"fmt"
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
)

// survey returns a robot's walk through aisles: lanes side by side, walked up and down, n poses .5 m apart, a closure to the lane
// before at every eighth pose, and separators spread over the way in bunches, as ties come.
func survey(dim, n, separators int, rng *rand.Rand) (*graph, []int32) {
	const lane = 60 // poses
	g := &graph{dim: dim}
	measure := func(i, j int) {
		z := g.poses[i].Between(g.poses[j]).Plus(tangent(dim, rng, .02, .005))
		g.links = append(g.links, link{int32(i), int32(j), z, information(dim, rng)})
	}
	for i := 0; i < n; i++ {
		row, along := i/lane, i%lane
		turn := 0.0
		if row%2 == 1 {
			along, turn = lane-1-along, 3.14
		}
		x := lie.Exp(lie.Tangent{0, 0, 0, 0, 0, turn + .05*rng.NormFloat64()})
		x.T = [3]float64{.5 * float64(along), 2 * float64(row), 0}
		g.poses = append(g.poses, x)
		if i > 0 {
			measure(i-1, i)
		}
		if row > 0 && along%8 == 3 {
			back := (row-1)*lane + along
			if row%2 == 0 {
				back = (row-1)*lane + lane - 1 - along
			}
			measure(back, i)
		}
	}
	var chosen []int32
	for len(chosen) < separators {
		v := rng.IntN(n - 20)
		for k := 0; k < 4 && len(chosen) < separators; k++ {
			chosen = append(chosen, int32(v+5*k))
		}
	}
	return g, chosen
}

func BenchmarkCondense(b *testing.B) {
	for _, c := range []struct{ dim, n, separators int }{
		{3, 5000, 60}, {6, 5000, 60}, {6, 5000, 300}, {3, 20000, 300}, {6, 20000, 300}, {6, 5000, 1},
	} {
		g, separators := survey(c.dim, c.n, c.separators, rand.New(rand.NewPCG(1, uint64(c.n))))
		terms := g.linearise()
		b.Run(fmt.Sprintf("dim=%d/poses=%d/separators=%d", c.dim, c.n, c.separators), func(b *testing.B) {
			b.ReportAllocs()
			var r *Condensed
			for b.Loop() {
				var err error
				if r, err = Condense(c.dim, c.n, terms, separators); err != nil {
					b.Fatal(err)
				}
			}
			widest := 0
			for _, q := range r.Cliques {
				widest = max(widest, len(q.Nodes))
			}
			b.ReportMetric(float64(len(r.Junctions)), "junctions")
			b.ReportMetric(float64(widest), "widest")
			b.ReportMetric(float64(r.Bytes), "bytes")
		})
	}
}

// BenchmarkOrder is the symbolic part alone.
func BenchmarkOrder(b *testing.B) {
	g, separators := survey(6, 5000, 300, rand.New(rand.NewPCG(1, 5000)))
	terms := g.linearise()
	for b.Loop() {
		newOrdering(6, len(g.poses), len(g.poses), terms, separators).run()
	}
}

func BenchmarkInterior(b *testing.B) {
	g, separators := survey(6, 5000, 60, rand.New(rand.NewPCG(1, 5000)))
	c, err := Condense(6, len(g.poses), g.linearise(), separators)
	if err != nil {
		b.Fatal(err)
	}
	steps := make([]float64, 6*len(g.poses))
	b.ReportAllocs()
	for b.Loop() {
		c.Interior(steps)
	}
}
