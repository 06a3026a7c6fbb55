package posegraph

import (
	"testing"

	"pgregory.net/rapid"

	"selvage/internal/lie"
)

// Away from where it was made, the gradient of a clique with points is that of its cost, and a common motion changes nothing.
func TestMarkCliqueAgainstDifferences(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			poses, points := rapid.IntRange(1, 3).Draw(t, "poses"), rapid.IntRange(1, 3).Draw(t, "points")
			var at []lie.SE3
			var places [][3]float64
			g := New(dim, []lie.SE3{lie.Identity()}) // held, and part of nothing
			var nodes, marks []int32
			for k := range poses {
				at = append(at, turned(r, dim, 10, 3*r.Float64()))
				g.Values.Poses = append(g.Values.Poses, at[k].Plus(tangent(r, dim, 0.5, 0.3)))
				nodes = append(nodes, int32(k+1))
			}
			for k := range points {
				places = append(places, spot(r, dim, 10))
				d := spot(r, dim, 0.5)
				for c := range d {
					d[c] += places[k][c]
				}
				g.Values.Points = append(g.Values.Points, d)
				marks = append(marks, int32(k))
			}
			n := dim*(poses-1) + 3*points
			h, b := positive(r, n), make([]float64, n)
			for i := range b {
				b[i] = r.NormFloat64()
			}
			set := g.AddMarkCliques()
			set.Add(nodes, at, marks, places, h, b)
			s := solver(t, g, []int32{0})
			cost, grad := s.Linearise()
			near(t, "cost", []float64{cost}, []float64{g.Cost()}, 1e-12, 1)
			const step = 1e-6
			want := make([]float64, 0, len(grad))
			for v := 1; v <= poses; v++ {
				x := g.Values.Poses[v]
				for _, c := range components(dim) {
					g.Values.Poses[v] = plus(x, c, step)
					up := g.Cost()
					g.Values.Poses[v] = plus(x, c, -step)
					want = append(want, (up-g.Cost())/(2*step))
				}
				g.Values.Poses[v] = x
			}
			for p := range points {
				for c := range 3 {
					if dim == 3 && c == 2 { // held
						want = append(want, grad[len(want)])
						continue
					}
					x := g.Values.Points[p][c]
					g.Values.Points[p][c] = x + step
					up := g.Cost()
					g.Values.Points[p][c] = x - step
					want = append(want, (up-g.Cost())/(2*step))
					g.Values.Points[p][c] = x
				}
			}
			near(t, "gradient", grad, want, 1e-6, 1)
			move := turned(r, dim, 100, 2)
			for v := range g.Values.Poses {
				g.Values.Poses[v] = move.Mul(g.Values.Poses[v])
			}
			for p := range points {
				g.Values.Points[p] = move.Apply(g.Values.Points[p])
			}
			near(t, "cost after a common motion", []float64{g.Cost()}, []float64{cost}, 1e-9, 1)
		})
	})
}

// The joint covariance of the poses of a clique with points is that of the solver.
func TestMarkCliqueJoint(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(5)
		g := New(dim, []lie.SE3{turned(r, dim, 10, 1), turned(r, dim, 10, 1), turned(r, dim, 10, 1)})
		g.Values.Points = [][3]float64{spot(r, dim, 5), spot(r, dim, 5)}
		set := g.AddMarkCliques()
		n, m := 2*dim+6, 2*dim
		h := positive(r, n)
		for i := range n * n {
			if height := func(k int) bool { return dim == 3 && k >= m && (k-m)%3 == 2 }; height(i/n) || height(i%n) {
				h[i] = 0
			}
		}
		set.Add([]int32{2, 0, 1}, []lie.SE3{g.Values.Poses[2], g.Values.Poses[0], g.Values.Poses[1]}, []int32{1, 0},
			[][3]float64{g.Values.Points[1], g.Values.Points[0]}, h, make([]float64, n))
		s := solver(t, g, []int32{0})
		want, err := s.Joint([]int32{2, 0, 1})
		if err != nil {
			t.Fatal(err)
		}
		sigma, err := s.Covariance()
		if err != nil {
			t.Fatal(err)
		}
		near(t, "joint covariance", set.Joint(0, sigma), want, 1e-9, 1)
	})
}
