package lie

import (
	"math"
	"testing"
)

// Values computed with 60 digits (mpmath) for this project.
func TestReferenceValues(t *testing.T) {
	x := Exp(Tangent{1, 2, 3, .1, -.2, .3})
	want(t, x.T[:], []float64{0.3937271044, 1.933798447, 3.157956597}, 1e-9)
	want(t, x.R[:3], []float64{0.93575480327791891, -0.30293271340263711, -0.18054007669439773}, 1e-15)
	j := JrInv(Tangent{1, 2, 3, .1, -.2, .3})
	want(t, j[:6], []float64{0.9891413043, -0.1516705686, -0.0974941472, -0.0837465469, -1.500033557, 1.050167392}, 1e-9)
	y := Exp2([3]float64{1, 2, .5})
	want(t, []float64{y.X, y.Y}, []float64{0.4691813248, 2.162537031}, 1e-9)
	k := JrInv2([3]float64{1, 2, .5})
	want(t, k[:3], []float64{0.9790793412, -0.25, 1.041841318}, 1e-9)
	q := Exp2([3]float64{1, 0, math.Pi / 2})
	want(t, []float64{q.X, q.Y, q.S}, []float64{2 / math.Pi, 2 / math.Pi, 1}, 1e-15)
}

func want(t *testing.T, got, expected []float64, tol float64) {
	t.Helper()
	for i := range expected {
		if d := math.Abs(got[i] - expected[i]); !(d <= tol) {
			t.Errorf("entry %d: %.17g, want %.17g (off by %.2g)", i, got[i], expected[i], d)
		}
	}
}
