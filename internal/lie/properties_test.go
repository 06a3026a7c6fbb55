package lie

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"
)

// drawTwist draws a twist with an angle up to limit and a translation up to 1000 m.
func drawTwist(t *rapid.T, name string, limit float64) Tangent {
	rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, name+" axis"), 0))
	th := rapid.Float64Range(0, limit).Draw(t, name+" angle")
	s := math.Pow(10, rapid.Float64Range(-6, 3).Draw(t, name+" log10 of metres"))
	a := [3]float64{rng.NormFloat64(), rng.NormFloat64(), rng.NormFloat64()}
	n := th / math.Sqrt(a[0]*a[0]+a[1]*a[1]+a[2]*a[2])
	u := func() float64 { return s * (2*rng.Float64() - 1) }
	return Tangent{u(), u(), u(), n * a[0], n * a[1], n * a[2]}
}

func negative(xi Tangent) Tangent {
	for i := range xi {
		xi[i] = -xi[i]
	}
	return xi
}

func TestExpOfTheNegativeIsTheInverse(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		xi := drawTwist(t, "xi", 2*math.Pi)
		x := Exp(xi)
		back, inverse := Exp(negative(xi)), x.Inv()
		near(t, "Exp(-xi)", flat(&back), flat(&inverse), 1e-14)
		one := x.Mul(inverse)
		near(t, "X X^-1", one.R[:], []float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, 1e-14)
		if e := largestOf(one.T[:]); !(e <= 1e-14*math.Max(1, largestOf(x.T[:]))) {
			t.Errorf("X X^-1 moves the origin by %.2g", e)
		}
		seen := x.Between(x)
		near(t, "X^-1 X", seen.T[:], []float64{0, 0, 0}, 0)
	})
}

func TestLogUndoesExp(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		xi := drawTwist(t, "xi", math.Pi-1e-7)
		x := Exp(xi)
		back := x.Log()
		near(t, "rotation", back[3:], xi[3:], 1e-14*math.Max(1, 1/largestOf(xi[3:]))) // a matrix cannot hold tiny angles better
		near(t, "twist", back[:], xi[:], 1e-13)
		again := Exp(back)
		near(t, "Exp(Log X)", flat(&again), flat(&x), 1e-14)
	})
}

func TestJacobians(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		xi := drawTwist(t, "xi", math.Pi)
		j, inverse := Jr(xi), JrInv(xi)
		identity := mul6(&j, &inverse)
		scale := math.Max(1, largestOf(j[:]))
		for i, v := range identity {
			one := 0.0
			if i%7 == 0 {
				one = 1
			}
			if e := math.Abs(v-one) / scale; !(e <= 1e-13) {
				t.Errorf("Jr JrInv: entry %d is off by %.2g", i, e)
			}
		}
		// Jl(xi) = Jr(-xi) = Ad(Exp xi) Jr(xi)
		x := Exp(xi)
		ad := x.Adjoint()
		left, turned := Jr(negative(xi)), mul6(&ad, &j)
		if e := largestOf(difference(left[:], turned[:])) / (scale * math.Max(1, largestOf(ad[:]))); !(e <= 1e-13) {
			t.Errorf("Jr(-xi) and Ad Jr(xi) differ by %.2g", e)
		}
	})
}

func difference(a, b []float64) []float64 {
	d := make([]float64, len(a))
	for i := range a {
		d[i] = a[i] - b[i]
	}
	return d
}

// The Jacobian is the derivative: Log(Exp(xi)^-1 Exp(xi + h)) is Jr(xi) h to second order of h, by central differences.
func TestJacobianIsTheDerivative(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		xi := drawTwist(t, "xi", 3)
		x := Exp(xi)
		j := Jr(xi)
		const h = 1e-4
		for c := 0; c < 6; c++ {
			up, down := xi, xi
			up[c] += h
			down[c] -= h
			a, b := x.Between(Exp(up)), x.Between(Exp(down))
			la, lb := a.Log(), b.Log()
			for i := 0; i < 6; i++ {
				if e := math.Abs((la[i]-lb[i])/(2*h)-j[6*i+c]) / math.Max(1, largestOf(j[:])); !(e < 1e-7) {
					t.Errorf("entry %d, %d is off by %.2g", i, c, e)
				}
			}
		}
	})
}

func TestAdjoint(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		xi, d := drawTwist(t, "xi", math.Pi), drawTwist(t, "d", 1)
		x := Exp(xi)
		a := x.Adjoint()

		// X Exp(d) X^-1 = Exp(Ad d)
		left := x.Mul(Exp(d)).Mul(x.Inv())
		var turned Tangent
		for i := range turned {
			for k := range d {
				turned[i] += a[6*i+k] * d[k]
			}
		}
		right := Exp(turned)
		near(t, "rotation of X Exp(d) X^-1", left.R[:], right.R[:], 1e-14*math.Max(1, largestOf(turned[3:])*4))
		scale := math.Max(1, largestOf(x.T[:])) + largestOf(d[:3])
		if e := largestOf(difference(left.T[:], right.T[:])) / scale; !(e <= 1e-14) {
			t.Errorf("translation of X Exp(d) X^-1 is off by %.2g", e)
		}

		// Ad(X Y) = Ad(X) Ad(Y)
		y := Exp(d)
		b := y.Adjoint()
		xy := x.Mul(y)
		both, product := xy.Adjoint(), mul6(&a, &b)
		if e := largestOf(difference(both[:], product[:])) / scale; !(e <= 2e-14) {
			t.Errorf("Ad(X Y) and Ad(X) Ad(Y) differ by %.2g", e)
		}
	})
}

// The plane is the part of space with z = 0 and rotations about z: components 0, 1, 5 of everything.
func TestPlaneIsPartOfSpace(t *testing.T) {
	pick := func(m [36]float64) (p []float64) {
		for _, i := range []int{0, 1, 5} {
			for _, j := range []int{0, 1, 5} {
				p = append(p, m[6*i+j])
			}
		}
		return p
	}
	rapid.Check(t, func(t *rapid.T) {
		v := [3]float64{
			rapid.Float64Range(-1000, 1000).Draw(t, "x"),
			rapid.Float64Range(-1000, 1000).Draw(t, "y"),
			rapid.Float64Range(-math.Pi, math.Pi).Draw(t, "theta"),
		}
		xi := Tangent{v[0], v[1], 0, 0, 0, v[2]}
		plane, space := Exp2(v), Exp(xi)
		lifted := plane.Spatial()
		near(t, "exp", flat(&lifted), flat(&space), 1e-14)
		j2, j := Jr2(v), Jr(xi)
		near(t, "right Jacobian", j2[:], pick(j), 1e-14)
		i2, i := JrInv2(v), JrInv(xi)
		near(t, "inverse right Jacobian", i2[:], pick(i), 1e-14)
		a2, a := plane.Adjoint(), lifted.Adjoint()
		near(t, "adjoint", a2[:], pick(a), 0)
		l2, l := plane.Log(), lifted.Log()
		if math.Abs(v[2]) < 3.14159 { // at half a turn both signs are right
			near(t, "log", l2[:], []float64{l[0], l[1], l[5]}, 1e-14)
		}
		w := [3]float64{v[1] / 3, v[0] / 7, v[2] / 2}
		other := Exp2(w)
		product, between := plane.Mul(other).Spatial(), plane.Between(other).Spatial()
		productWant, betweenWant := lifted.Mul(other.Spatial()), lifted.Between(other.Spatial())
		near(t, "product", flat(&product), flat(&productWant), 1e-14)
		near(t, "between", flat(&between), flat(&betweenWant), 1e-14)
		inverse, inverseWant := plane.Inv().Spatial(), lifted.Inv()
		near(t, "inverse", flat(&inverse), flat(&inverseWant), 1e-15)
		step, stepWant := plane.Plus(w).Spatial(), lifted.Plus(Tangent{w[0], w[1], 0, 0, 0, w[2]})
		near(t, "plus", flat(&step), flat(&stepWant), 1e-14)
		if back := Planar(&lifted); back != plane {
			t.Errorf("Planar(Spatial(%v)) is %v", plane, back)
		}
	})
}

func TestQuaternions(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		xi := drawTwist(t, "xi", 2*math.Pi)
		r := ExpSO3([3]float64(xi[3:]))
		q := QuatOf(&r)
		if n := q[0]*q[0] + q[1]*q[1] + q[2]*q[2] + q[3]*q[3]; !(math.Abs(n-1) < 1e-15) || q[3] < 0 {
			t.Errorf("quaternion %v has norm %.17g; expected one with w >= 0", q, n)
		}
		s := rapid.Float64Range(-100, 100).Filter(func(s float64) bool { return math.Abs(s) > 1e-3 }).Draw(t, "scale")
		back := RotationOf(Quat{s * q[0], s * q[1], s * q[2], s * q[3]})
		near(t, "rotation of any multiple", back[:], r[:], 1e-14)
	})
}

// Many small steps leave the rotation orthonormal.
func TestPlusStaysARotation(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	x := Identity()
	for i := 0; i < 100000; i++ {
		x = x.Plus(Tangent{3: .1 * rng.NormFloat64(), 4: .1 * rng.NormFloat64(), 5: .1 * rng.NormFloat64()})
	}
	one := x.R.T().Mul(x.R)
	near(t, "R'R", one[:], []float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, 1e-15)
}

// R maximises tr(R'M), and so is nearest to M, exactly when S = R'M is symmetric and tr(S) I - S positive semidefinite.
func TestNearestRotation(t *testing.T) {
	for seed := uint64(0); seed < 2000; seed++ {
		rng := rand.New(rand.NewPCG(seed, 7))
		var m Mat3
		for i := range m {
			m[i] = rng.NormFloat64()
		}
		s := math.Pow(10, 20*rng.Float64()-10)
		switch seed % 4 {
		case 1: // nearly a rotation
			r := ExpSO3([3]float64{rng.NormFloat64(), rng.NormFloat64(), rng.NormFloat64()})
			for i := range m {
				m[i] = r[i] + 1e-3*m[i]
			}
		case 2: // mirrored: a rotation with one axis turned over, no longer a rotation's neighbour
			r := ExpSO3([3]float64{rng.NormFloat64(), rng.NormFloat64(), rng.NormFloat64()})
			m = r.Mul(Mat3{3, 0, 0, 0, 2, 0, 0, 0, -1})
		case 3: // flat: rank two
			m[6], m[7], m[8] = m[0]+m[3], m[1]+m[4], m[2]+m[5]
		}
		for i := range m {
			m[i] *= s
		}
		r, ok := NearestRotation(&m)
		if !ok {
			t.Fatalf("seed %d: %v is said to leave the rotation open", seed, m)
		}
		one := r.T().Mul(r)
		near(t, "R'R", one[:], []float64{1, 0, 0, 0, 1, 0, 0, 0, 1}, 1e-14)
		if d := determinant(&r); !(math.Abs(d-1) < 1e-14) {
			t.Fatalf("seed %d: determinant %.17g", seed, d)
		}
		S := r.T().Mul(m)
		scale := largestOf(m[:])
		st := S.T()
		if e := largestOf(difference(S[:], st[:])) / scale; !(e < 1e-13) {
			t.Fatalf("seed %d: R'M is off its transpose by %.2g", seed, e)
		}
		tr := S[0] + S[4] + S[8]
		var eigen mat.EigenSym
		sym := mat.NewSymDense(3, []float64{tr - S[0], -S[1], -S[2], 0, tr - S[4], -S[5], 0, 0, tr - S[8]})
		if !eigen.Factorize(sym, false) {
			t.Fatal("eigenvalues")
		}
		if low := eigen.Values(nil)[0] / scale; !(low > -1e-13) {
			t.Fatalf("seed %d: a turn brings R closer to M, eigenvalue %.2g", seed, low)
		}
		for k := 0; k < 20; k++ { // and no rotation drawn at random is closer
			o := ExpSO3([3]float64{2 * rng.NormFloat64(), 2 * rng.NormFloat64(), 2 * rng.NormFloat64()})
			if trace(&o, &m) > tr+1e-12*scale {
				t.Fatalf("seed %d: %v is closer than %v", seed, o, r)
			}
		}
	}
}

func determinant(m *Mat3) float64 {
	return m[0]*(m[4]*m[8]-m[5]*m[7]) - m[1]*(m[3]*m[8]-m[5]*m[6]) + m[2]*(m[3]*m[7]-m[4]*m[6])
}

func trace(r, m *Mat3) (sum float64) {
	for i := range r {
		sum += r[i] * m[i]
	}
	return sum
}

func TestNearestRotationLeftOpen(t *testing.T) {
	for name, m := range map[string]Mat3{
		"zero":                          {},
		"one direction":                 {1, 2, 3, 2, 4, 6, 3, 6, 9},
		"mirror of the space":           {-1, 0, 0, 0, -1, 0, 0, 0, -1},
		"mirror, two equal axes":        {2, 0, 0, 0, 1, 0, 0, 0, -1},
		"not a number":                  {math.NaN(), 0, 0, 0, 1, 0, 0, 0, 1},
		"infinite":                      {math.Inf(1), 0, 0, 0, 1, 0, 0, 0, 1},
		"one direction, tiny and large": {1e-300, 0, 0, 0, 0, 0, 0, 0, 0},
	} {
		r, ok := NearestRotation(&m)
		if ok {
			t.Errorf("%s: %v is said to determine %v", name, m, r)
		}
		if d := determinant(&r); !(math.Abs(d-1) < 1e-14) {
			t.Errorf("%s: even so a rotation was expected, determinant %g", name, d)
		}
	}
}

func TestZeroQuaternionPanics(t *testing.T) {
	defer func() {
		if recover() == nil {
			t.Error("the zero quaternion was taken for a rotation")
		}
	}()
	RotationOf(Quat{})
}

func BenchmarkExp(b *testing.B) {
	xi := Tangent{1, 2, 3, .1, -.2, .3}
	for b.Loop() {
		sinkMotion = Exp(xi)
	}
}

func BenchmarkLog(b *testing.B) {
	x := Exp(Tangent{1, 2, 3, .1, -.2, .3})
	for b.Loop() {
		sinkTwist = x.Log()
	}
}

func BenchmarkJrInvBlocks(b *testing.B) {
	xi := Tangent{1, 2, 3, .1, -.2, .3}
	var j, q Mat3
	for b.Loop() {
		JrInvBlocks(&xi, &j, &q)
	}
}

var (
	sinkMotion SE3
	sinkTwist  Tangent
)
