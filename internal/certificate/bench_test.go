package certificate

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
)

// mown is a track in rows beside each other, with closures to the row before at every fifth keyframe; it starts near its bottom.
func mown(dim, rows int) (*posegraph.Graph, *posegraph.Between) {
	r := rand.New(rand.NewPCG(1, 9))
	noise := func(x lie.SE3, m, rad float64) lie.SE3 {
		t := lie.Tangent{m * r.NormFloat64(), m * r.NormFloat64(), m * r.NormFloat64(), rad * r.NormFloat64(), rad * r.NormFloat64(), rad * r.NormFloat64()}
		if dim == 3 {
			t[2], t[3], t[4] = 0, 0, 0
		}
		return x.Plus(t)
	}
	var truth, start []lie.SE3
	for row := range rows {
		for c := range rows {
			x, heading := float64(c), 0.0
			if row%2 == 1 {
				x, heading = float64(rows-1-c), math.Pi
			}
			p := lie.SE2{X: x, Y: 2 * float64(row), C: math.Cos(heading), S: math.Sin(heading)}.Spatial()
			truth = append(truth, p)
			start = append(start, noise(p, 0.02, 0.002))
		}
	}
	g := posegraph.New(dim, start)
	b := g.AddBetween()
	sigma := []float64{0.02, 0.02, 0.03, 0.002, 0.002, 0.003}
	add := func(i, j int) {
		b.Add(int32(i), int32(j), noise(truth[i].Between(truth[j]), 0.02, 0.002), info(sigma))
	}
	for i := 1; i < len(truth); i++ {
		add(i-1, i)
		if row := i / rows; row > 0 && i%5 == 0 {
			add(2*row*rows-1-i, i)
		}
	}
	return g, b
}

func BenchmarkCertify(b *testing.B) {
	for _, dim := range []int{3, 6} {
		for _, rows := range []int{100, 316} {
			b.Run(fmt.Sprintf("%d keyframes, dim %d", rows*rows, dim), func(b *testing.B) {
				g, m := mown(dim, rows)
				for range b.N {
					r := certify(b, g, m)
					b.Logf("%+v", r)
				}
			})
		}
	}
}
