package msgs

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"
)

// gram makes a d x d positive semidefinite matrix of the given rank whose diagonal spans the given range of scales.
func gram(rng *rand.Rand, d, rank int, decades float64) []float64 {
	a := make([]float64, d*max(rank, 1))
	for i := range a {
		if rank > 0 {
			a[i] = rng.NormFloat64()
		}
	}
	rank = max(rank, 1)
	s := make([]float64, d)
	for i := range s {
		s[i] = math.Pow(10, (2*rng.Float64()-1)*decades)
	}
	m := make([]float64, d*d)
	for i := range d {
		for j := range d {
			m[i*d+j] = s[i] * s[j] * dot(a[i*rank:(i+1)*rank], a[j*rank:(j+1)*rank])
		}
	}
	return m
}

// worst is the largest error of got relative to sqrt(m_ii m_jj).
func worst(t *testing.T, m, got []float64, d int) float64 {
	t.Helper()
	w := 0.0
	for i := range d {
		for j := range d {
			e := math.Abs(m[i*d+j] - got[i*d+j])
			if s := math.Sqrt(m[i*d+i]) * math.Sqrt(m[j*d+j]); s > 0 {
				e /= s
			}
			if math.IsNaN(e) {
				t.Fatalf("entry %d,%d: %v became %v", i, j, m[i*d+j], got[i*d+j])
			}
			w = max(w, e)
		}
	}
	return w
}

// leastEigenvalue is the smallest eigenvalue of the unit-diagonal scaling of m.
func leastEigenvalue(t *testing.T, m []float64, d int) float64 {
	t.Helper()
	s := mat.NewSymDense(d, nil)
	for i := range d {
		for j := range i + 1 {
			if r := math.Sqrt(m[i*d+i]) * math.Sqrt(m[j*d+j]); r > 0 {
				s.SetSym(i, j, m[i*d+j]/r)
			}
		}
	}
	var e mat.EigenSym
	if !e.Factorize(s, false) {
		t.Fatal("no eigenvalues")
	}
	return e.Values(nil)[0]
}

func TestMatricesSurvive(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for _, decades := range []float64{0, 2, 6, 18} {
		for _, d := range []int{1, 3, 6, 18, 60} {
			for _, rank := range []int{0, 1, d / 2, d - 1, d, 2 * d} {
				t.Run(fmt.Sprintf("decades %g d %d rank %d", decades, d, rank), func(t *testing.T) {
					m := gram(rng, d, rank, decades)
					l, err := appendFactor(nil, m, d)
					if err != nil {
						t.Fatal(err)
					}
					got := make([]float64, d*d)
					expand(got, l, d)
					if e := worst(t, m, got, d); e > 8*float64(d+1)*0x1p-52 {
						t.Errorf("float64: error %g", e)
					}
					l32, err := appendFactor32(nil, m, d)
					if err != nil {
						t.Fatal(err)
					}
					expand(got, l32, d)
					if e := worst(t, m, got, d); e > float64(d)*0x1p-23 {
						t.Errorf("float32: error %g", e)
					}
					if e := leastEigenvalue(t, got, d); e < -float64(d)*1e-15 {
						t.Errorf("float32: eigenvalue %g", e)
					}
				})
			}
		}
	}
}

// A null space along the axes, as a sensor without heading or height has, stays exactly one.
func TestExactNullSpaceStays(t *testing.T) {
	m := []float64{4, 0, 2, 0, 0, 0, 2, 0, 1}
	l, err := appendFactor(nil, m, 3)
	if err != nil {
		t.Fatal(err)
	}
	got := make([]float64, 9)
	expand(got, l, 3)
	for i := range m {
		if got[i] != m[i] {
			t.Fatalf("got %v, want %v", got, m)
		}
	}
}

// Matrices which rounding turned slightly indefinite are accepted, and arrive within their own noise.
func TestRoundedMatricesAreAccepted(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	for range 200 {
		d := 2 + rng.IntN(12)
		m := gram(rng, d, 1+rng.IntN(d), 3)
		for i := range d {
			for j := range i + 1 {
				f := 1 + 6e-9*(2*rng.Float64()-1)
				m[i*d+j] *= f
				m[j*d+i] = m[i*d+j]
			}
		}
		l, err := appendFactor(nil, m, d)
		if err != nil {
			t.Fatal(err)
		}
		got := make([]float64, d*d)
		expand(got, l, d)
		if e := worst(t, m, got, d); e > 1e-6 {
			t.Fatalf("error %g", e)
		}
	}
}

func TestBadMatricesAreRefused(t *testing.T) {
	for name, m := range map[string][]float64{
		"indefinite":         {1, 2, 2, 1},
		"negative":           {-1, 0, 0, 1},
		"asymmetric":         {1, 0.5, 0.4, 1},
		"beside a zero":      {0, 1, 1, 1},
		"a little too far":   {1, 1, 1, 1 - 1e-5},
		"lower only nothing": {1, 0.5, 0, 1},
	} {
		if _, err := appendFactor(nil, m, 2); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
}

func TestPosesSurvive(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		dim := rapid.SampledFrom([]int{3, 6}).Draw(t, "dim")
		p := drawPose(t, dim)
		v := appendPose(nil, &p, dim)
		if len(v) != dim {
			t.Fatalf("%d numbers", len(v))
		}
		got, err := takePose(v, dim)
		if err != nil {
			t.Fatal(err)
		}
		if d := poseError(p, got); d > 5e-16 { // the last bit of an angle near pi is 4.4e-16
			t.Fatalf("%v became %v, off by %g", p, got, d)
		}
	})
}

// poseError is the largest difference of two poses; q and -q are the same rotation.
func poseError(a, b Pose) float64 {
	same, opposite := 0.0, 0.0
	for i := range 4 {
		same = max(same, math.Abs(a.Q[i]-b.Q[i]))
		opposite = max(opposite, math.Abs(a.Q[i]+b.Q[i]))
	}
	e := min(same, opposite)
	for i := range 3 {
		e = max(e, math.Abs(a.T[i]-b.T[i]))
	}
	return e
}

func drawPose(t *rapid.T, dim int) Pose {
	var p Pose
	for i := range 3 {
		p.T[i] = rapid.Float64Range(-1e7, 1e7).Draw(t, "t")
	}
	n := 0.0
	for i := range p.Q {
		if dim == 6 || i >= 2 {
			p.Q[i] = rapid.Float64Range(-1, 1).Draw(t, "q")
		}
		n += p.Q[i] * p.Q[i]
	}
	if n < 1e-6 { // keep the other components: small angles matter most
		n += 1 - p.Q[3]*p.Q[3]
		p.Q[3] = 1
	}
	for i := range p.Q {
		p.Q[i] /= math.Sqrt(n)
	}
	if dim == 3 {
		p.T[2] = 0
	}
	return p
}
