package evidence

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
)

func anyPose(rng *rand.Rand) lie.SE3 {
	var xi lie.Tangent
	for k := range xi {
		xi[k] = 2 * rng.NormFloat64()
	}
	return lie.Exp(xi)
}

func anyCov(rng *rand.Rand) [36]float64 {
	a := mat.NewDense(6, 8, nil)
	for i := 0; i < 6; i++ {
		for j := 0; j < 8; j++ {
			a.Set(i, j, rng.NormFloat64())
		}
	}
	var m mat.Dense
	m.Mul(a, a.T())
	return [36]float64(m.RawMatrix().Data)
}

func TestCarryIsTheAdjoint(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	for run := 0; run < 50; run++ {
		y, m := anyPose(rng), anyCov(rng)
		inv := y.Inv()
		ad := inv.Adjoint()
		a, c := mat.NewDense(6, 6, ad[:]), mat.NewDense(6, 6, m[:])
		var want mat.Dense
		want.Mul(a, c)
		want.Mul(&want, a.T())
		in := covOf(&m, 3)
		out := in.carry(&y)
		var got [36]float64
		out.dense(3, &got)
		for i := range got {
			w := want.RawMatrix().Data[i]
			if math.Abs(got[i]-w) > 1e-11*(1+mat.Norm(&want, 1)) {
				t.Fatalf("entry %d: %g, want %g", i, got[i], w)
			}
		}
	}
}

func TestMahalanobisAgainstSolve(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 1))
	for run := 0; run < 50; run++ {
		m := anyCov(rng)
		var e lie.Tangent
		for k := range e {
			e[k] = rng.NormFloat64()
		}
		c := covOf(&m, 3)
		var x mat.VecDense
		v := mat.NewVecDense(6, e[:])
		if err := x.SolveVec(mat.NewDense(6, 6, m[:]), v); err != nil {
			t.Fatal(err)
		}
		want := mat.Dot(v, &x)
		if got := mahalanobis(&e, &c, 3); math.Abs(got-want) > 1e-8*(1+want) {
			t.Errorf("%g, want %g", got, want)
		}
		// In the plane only x, y and heading count.
		s := mat.NewDense(3, 3, nil)
		for i, p := range planar[:3] {
			for j, q := range planar[:3] {
				s.Set(i, j, m[6*p+q])
			}
		}
		v = mat.NewVecDense(3, []float64{e[0], e[1], e[5]})
		x = mat.VecDense{}
		if err := x.SolveVec(s, v); err != nil {
			t.Fatal(err)
		}
		c = covOf(&m, 2)
		want = mat.Dot(v, &x)
		if got := mahalanobis(&e, &c, 2); math.Abs(got-want) > 1e-8*(1+want) {
			t.Errorf("planar %g, want %g", got, want)
		}
	}
	if bad := (cov{}); !math.IsInf(mahalanobis(&lie.Tangent{1}, &bad, 3), 1) {
		t.Error("a singular covariance must fail every gate")
	}
}

// A heading bias bends a track. The leg between two nodes must move as leg says, to first order, in either direction.
func TestBiasAlongALeg(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 1))
	const n, eps = 40, 1e-6
	steps := make([]lie.SE3, n)
	for k := range steps {
		steps[k] = lie.Exp(lie.Tangent{.25, 0, 0, .02 * rng.NormFloat64(), .02 * rng.NormFloat64(), .1 * rng.NormFloat64()})
	}
	track := func(bias float64) Unit {
		u := Unit{Poses: make([]lie.SE3, n), TravelM: make([]float64, n), Covariance: func(i, j int) [36]float64 {
			if i >= j {
				t.Fatalf("covariance asked for from %d to %d", i, j)
			}
			return [36]float64{}
		}}
		u.Poses[0] = anyPose(rand.New(rand.NewPCG(9, 9)))
		for k := 1; k < n; k++ {
			// The turn is spread over the step: half before, half after.
			half := lie.Exp(lie.Tangent{0, 0, 0, 0, 0, bias * .25 / 2})
			u.Poses[k] = u.Poses[k-1].Mul(half).Mul(steps[k]).Mul(half)
			u.TravelM[k] = u.TravelM[k-1] + .25
		}
		return u
	}
	straight, bent := track(0), track(eps)
	o := DefaultOptions(3)
	o.BiasYaw = 1
	tr := newTrack(&straight, &o)
	for _, leg := range [][2]int{{3, 35}, {35, 3}, {0, 1}, {20, 12}} {
		p := straight.Poses[leg[0]].Between(straight.Poses[leg[1]])
		q := bent.Poses[leg[0]].Between(bent.Poses[leg[1]])
		d := p.Between(q)
		s := d.Log()
		_, c := tr.leg(leg[0], leg[1])
		var m [36]float64
		c.dense(3, &m)
		norm := 0.0
		for i := range s {
			norm += s[i] * s[i] / (eps * eps)
		}
		for i := 0; i < 6; i++ {
			for j := 0; j < 6; j++ {
				want := s[i] * s[j] / (eps * eps)
				if math.Abs(m[6*i+j]-want) > 2e-3*norm { // steps of a quarter metre are taken as straight
					t.Errorf("leg %v entry %d %d: %g, want %g", leg, i, j, m[6*i+j], want)
				}
			}
		}
	}
}

// The misclosures of true loops, drawn from their own covariances, must be chi-square: mean 6, one in a hundred beyond the gate.
func TestMisclosureIsChiSquare(t *testing.T) {
	rng := rand.New(rand.NewPCG(4, 1))
	root := sigmas(.02, .2*deg)
	var c36 [36]float64
	for k := range root {
		c36[7*k] = root[k] * root[k]
	}
	sum, beyond := 0.0, 0
	const runs = 4000
	for run := 0; run < runs; run++ {
		var units [2]Unit
		var truth [2][]lie.SE3
		for u := range units {
			p, q := anyPose(rng), anyPose(rng)
			truth[u] = []lie.SE3{p, q}
			leg := p.Between(q).Mul(lie.Exp(noise(rng, 3, root)))
			units[u] = Unit{Poses: []lie.SE3{lie.Identity(), leg}, TravelM: []float64{0, 5}, Covariance: func(i, j int) [36]float64 { return c36 }}
		}
		var ties []Tie
		for k := 0; k < 2; k++ {
			ties = append(ties, Tie{From: End{0, k}, To: End{1, 1 - k}, Z: truth[0][k].Between(truth[1][1-k]).Mul(lie.Exp(noise(rng, 3, root))), Cov: c36})
		}
		o := DefaultOptions(3)
		o.BiasYaw = 0
		b := newBody(units[:], ties, o)
		m := b.misfit(0, 1)
		sum += m
		if m > b.gate {
			beyond++
		}
	}
	if mean := sum / runs; math.Abs(mean-6) > 4*math.Sqrt(12./runs) {
		t.Errorf("mean %.3f, want 6", mean)
	}
	if math.Abs(float64(beyond)-.01*runs) > 4*math.Sqrt(.01*runs) {
		t.Errorf("%d of %d beyond the gate, want about %d", beyond, runs, runs/100)
	}
}

// Combining two ways must give the least-squares mean.
func TestFuse(t *testing.T) {
	rng := rand.New(rand.NewPCG(6, 1))
	for _, dim := range []int{2, 3} {
		a, b := anyCov(rng), anyCov(rng)
		var e [2]lie.Tangent
		e[0] = lie.Tangent{.1, .2, .3, .1, -.1, .05}
		e[1] = lie.Tangent{.12, .19, .3, .1, -.12, .06}
		c := [2]cov{covOf(&a, dim), covOf(&b, dim)}
		x, d := fuse(e[:], c[:], dim)
		// The derivative of the sum of squares vanishes at the mean.
		cost := func(x lie.Tangent) float64 {
			s := 0.0
			for k := range e {
				var r lie.Tangent
				for i := range r {
					r[i] = e[k][i] - x[i]
				}
				s += mahalanobis(&r, &c[k], dim)
			}
			return s
		}
		for _, i := range planar[:3] {
			hi, lo := x, x
			hi[i] += 1e-4
			lo[i] -= 1e-4
			if g := (cost(hi) - cost(lo)) / 2e-4; math.Abs(g) > 1e-6 {
				t.Errorf("dim %d: slope %g along component %d", dim, g, i)
			}
			// Its curvature is twice the information: a unit step along i costs at least 1/d_ii.
			var m [36]float64
			n := d.dense(dim, &m)
			j := i
			if dim == 2 && i == 5 {
				j = 2
			}
			if least := 1 / m[n*j+j]; cost(hi)-cost(x) < .999*least*1e-8 {
				t.Errorf("dim %d: variance of component %d is %g, too small", dim, i, m[n*j+j])
			}
		}
	}
}
