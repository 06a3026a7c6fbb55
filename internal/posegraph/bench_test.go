package posegraph

import (
	"fmt"
	"testing"

	"selvage/internal/lie"
)

// BenchmarkLinearise times one linearisation: 1000 relative poses, or 100 cliques of 3 or of 9 poses.
func BenchmarkLinearise(b *testing.B) {
	for _, dim := range []int{3, 6} {
		r := random(1)
		poses := make([]lie.SE3, 300)
		for i := range poses {
			poses[i] = turned(r, dim, 10, 3*r.Float64())
		}
		run := func(name string, fill func(g *Graph)) {
			b.Run(fmt.Sprintf("%s-%d", name, dim), func(b *testing.B) {
				g := New(dim, poses)
				fill(g)
				s := solver(b, g, []int32{0})
				b.ReportAllocs()
				for b.Loop() {
					s.Linearise()
				}
			})
		}
		run("between", func(g *Graph) {
			set := g.AddBetween()
			for k := range 1000 {
				i, j := int32(k%300), int32((k*7+1)%300)
				if i == j {
					j = (j + 1) % 300
				}
				info := information(r)
				set.Add(i, j, poses[i].Between(poses[j]).Plus(tangent(r, dim, 0.1, 0.1)), &info)
			}
		})
		for _, m := range []int{3, 9} {
			run(fmt.Sprintf("cliques-of-%d", m), func(g *Graph) {
				set := g.AddCliques()
				for range 100 {
					nodes, at := make([]int32, m), make([]lie.SE3, m)
					for k, v := range r.Perm(300)[:m] {
						nodes[k], at[k] = int32(v), poses[v].Plus(tangent(r, dim, 0.1, 0.1))
					}
					d := dim * (m - 1)
					set.Add(nodes, at, positive(r, d), make([]float64, d))
				}
			})
		}
	}
}
