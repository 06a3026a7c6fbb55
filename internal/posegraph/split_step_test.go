package posegraph

import (
	"math"
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// A factor cut at two new poses says the same of its ends as before: nothing is misclosed along the geodesic, and the end has
// the covariance it had.
func TestSplitSaysTheSame(t *testing.T) {
	for _, dim := range []int{3, 6} {
		rng := rand.New(rand.NewPCG(7, uint64(dim)))
		z := lie.Exp(lie.Tangent{1.5, 0.2, 0, 0, 0, 0.4})
		if dim == 6 {
			z = lie.Exp(lie.Tangent{1.5, 0.2, -0.3, 0.1, -0.2, 0.4})
		}
		info := randomInfo(rng)
		whole := New(dim, []lie.SE3{lie.Identity(), z})
		whole.AddBetween().Add(0, 1, z, &info)

		cut := New(dim, []lie.SE3{lie.Identity(), z, lie.Identity(), lie.Identity()})
		b := cut.AddBetween()
		b.Add(0, 1, z, &info)
		cut.Values.Poses[2] = b.Split(0, 2, 0.3)
		cut.Values.Poses[3] = cut.Values.Poses[2].Mul(b.Split(1, 3, 0.5))
		if c := cut.Cost(); c > 1e-24 {
			t.Errorf("dim %d: cost %g of a factor cut along its geodesic", dim, c)
		}
		want, got := endCovariance(t, whole), endCovariance(t, cut)
		for i := 0; i < dim; i++ {
			for j := 0; j < dim; j++ {
				k := i*dim + j
				if scale := math.Sqrt(want[i*(dim+1)] * want[j*(dim+1)]); math.Abs(got[k]-want[k]) > 1e-12*scale {
					t.Errorf("dim %d: covariance of the end, entry %d %d: %.15g, want %.15g", dim, i, j, got[k], want[k])
				}
			}
		}
	}
}

func endCovariance(t *testing.T, g *Graph) []float64 {
	t.Helper()
	s, err := NewSolver(g, []int32{0}, sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	c, err := s.Covariance()
	if err != nil {
		t.Fatal(err)
	}
	return c.Of(1)
}

// randomInfo returns a positive definite information matrix.
func randomInfo(rng *rand.Rand) (m [36]float64) {
	var a [36]float64
	for i := range a {
		a[i] = rng.NormFloat64()
	}
	for i := 0; i < 6; i++ {
		for j := 0; j < 6; j++ {
			for k := 0; k < 6; k++ {
				m[6*i+j] += a[6*i+k] * a[6*j+k]
			}
		}
		m[7*i] += 1
	}
	return m
}
