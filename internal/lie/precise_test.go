package lie

import (
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// precise is a square matrix of 300-bit numbers. Everything below is its power series, with no closed form in common with the
// package under test.
type precise struct {
	n int
	a []*big.Float
}

const bits = 300

func number(x float64) *big.Float { return new(big.Float).SetPrec(bits).SetFloat64(x) }

func newPrecise(n int) precise {
	m := precise{n, make([]*big.Float, n*n)}
	for i := range m.a {
		m.a[i] = number(0)
	}
	return m
}

func preciseIdentity(n int) precise {
	m := newPrecise(n)
	for i := 0; i < n; i++ {
		m.a[i*n+i].SetInt64(1)
	}
	return m
}

func preciseOf(n int, v []float64) precise {
	m := newPrecise(n)
	for i, x := range v {
		m.a[i].SetFloat64(x)
	}
	return m
}

func (m precise) mul(o precise) precise {
	c := newPrecise(m.n)
	t := number(0)
	for i := 0; i < m.n; i++ {
		for k := 0; k < m.n; k++ {
			if x := m.a[i*m.n+k]; x.Sign() != 0 {
				for j := 0; j < m.n; j++ {
					c.a[i*m.n+j].Add(c.a[i*m.n+j], t.Mul(x, o.a[k*m.n+j]))
				}
			}
		}
	}
	return c
}

// series returns sum_k m^k sign^k / (k + shift)!: the exponential for shift 0, the left or right Jacobian of m = ad for 1.
func (m precise) series(sign, shift int64) precise {
	sum, power := preciseIdentity(m.n), preciseIdentity(m.n)
	for k := int64(1); k < 120; k++ {
		power = power.mul(m)
		f := new(big.Float).SetPrec(bits).Quo(number(float64(sign)), number(float64(k+shift)))
		for i, x := range power.a {
			x.Mul(x, f)
			sum.a[i].Add(sum.a[i], x)
		}
	}
	return sum
}

// inverse is by Gauss-Jordan elimination with row pivoting.
func (m precise) inverse() precise {
	n := m.n
	a, b := newPrecise(n), preciseIdentity(n)
	for i := range m.a {
		a.a[i].Set(m.a[i])
	}
	t := number(0)
	for p := 0; p < n; p++ {
		best := p
		for i := p + 1; i < n; i++ {
			if new(big.Float).Abs(a.a[i*n+p]).Cmp(new(big.Float).Abs(a.a[best*n+p])) > 0 {
				best = i
			}
		}
		for j := 0; j < n; j++ {
			a.a[p*n+j], a.a[best*n+j] = a.a[best*n+j], a.a[p*n+j]
			b.a[p*n+j], b.a[best*n+j] = b.a[best*n+j], b.a[p*n+j]
		}
		pivot := new(big.Float).Copy(a.a[p*n+p])
		for j := 0; j < n; j++ {
			a.a[p*n+j].Quo(a.a[p*n+j], pivot)
			b.a[p*n+j].Quo(b.a[p*n+j], pivot)
		}
		for i := 0; i < n; i++ {
			if i == p {
				continue
			}
			f := new(big.Float).Copy(a.a[i*n+p])
			for j := 0; j < n; j++ {
				a.a[i*n+j].Sub(a.a[i*n+j], t.Mul(f, a.a[p*n+j]))
				b.a[i*n+j].Sub(b.a[i*n+j], t.Mul(f, b.a[p*n+j]))
			}
		}
	}
	return b
}

func (m precise) floats() []float64 {
	v := make([]float64, len(m.a))
	for i, x := range m.a {
		v[i], _ = x.Float64()
	}
	return v
}

// hat returns the 4 x 4 matrix whose exponential is the motion.
func hat(xi Tangent) []float64 {
	return []float64{
		0, -xi[5], xi[4], xi[0],
		xi[5], 0, -xi[3], xi[1],
		-xi[4], xi[3], 0, xi[2],
		0, 0, 0, 0,
	}
}

// angles are those at which a switch of formula, a cancellation or the end of the range could show.
var angles = []float64{
	0, 1e-160, 1e-12, 1e-8, 1e-5, .001, .01, .011, .05, .1, .2,
	.29999999, math.Nextafter(.3, 0), .3, math.Nextafter(.3, 1), .30000001, .31, .5,
	.99, math.Nextafter(1, 0), 1, math.Nextafter(1, 2), 1.01, 1.5, 2, 2.5, 3,
	math.Pi - 1e-3, math.Pi - 1e-6, math.Pi - 1e-9, math.Pi,
}

// twists calls f for every angle with several axes and translations.
func twists(f func(name string, xi Tangent)) {
	rng := rand.New(rand.NewPCG(3, 4))
	axes := [][3]float64{{1, 0, 0}, {0, -1, 0}, {0, 0, 1}, {1. / 3, 2. / 3, -2. / 3}}
	for len(axes) < 8 {
		v := [3]float64{rng.NormFloat64(), rng.NormFloat64(), rng.NormFloat64()}
		n := math.Sqrt(v[0]*v[0] + v[1]*v[1] + v[2]*v[2])
		axes = append(axes, [3]float64{v[0] / n, v[1] / n, v[2] / n})
	}
	for _, th := range angles {
		for k, a := range axes {
			s := math.Pow(10, float64(k%4)-1) // .1 m to 100 m
			xi := Tangent{s * rng.NormFloat64(), s * rng.NormFloat64(), s * rng.NormFloat64(), th * a[0], th * a[1], th * a[2]}
			f(fmt.Sprintf("angle %.17g axis %d", th, k), xi)
		}
	}
}

func TestAgainst300Bits(t *testing.T) {
	worst := map[string]float64{}
	compare := func(name, what string, got, expected []float64) {
		near(t, name+": "+what, got, expected, 1e-14)
		scale := largestOf(expected)
		for i := range got {
			worst[what] = math.Max(worst[what], math.Abs(got[i]-expected[i])/scale)
		}
	}
	twists(func(name string, xi Tangent) {
		motion := preciseOf(4, hat(xi)).series(1, 0).floats()
		x := Exp(xi)
		compare(name, "exp", flat(&x), motion[:12])
		r := ExpSO3([3]float64(xi[3:]))
		compare(name, "rotation", r[:], []float64{motion[0], motion[1], motion[2], motion[4], motion[5], motion[6], motion[8], motion[9], motion[10]})

		ad := adjointOf(xi)
		jacobian := preciseOf(6, ad[:]).series(-1, 1)
		j := Jr(xi)
		compare(name, "right Jacobian", j[:], jacobian.floats())
		inverse := JrInv(xi)
		compare(name, "inverse right Jacobian", inverse[:], jacobian.inverse().floats())
		a := x.Adjoint()
		compare(name, "adjoint", a[:], preciseOf(6, ad[:]).series(1, 0).floats())

		rounded := SE3{Mat3{motion[0], motion[1], motion[2], motion[4], motion[5], motion[6], motion[8], motion[9], motion[10]}, [3]float64{motion[3], motion[7], motion[11]}}
		back := rounded.Log()
		if th := math.Sqrt(back[3]*back[3] + back[4]*back[4] + back[5]*back[5]); th > math.Pi*(1+1e-15) {
			t.Errorf("%s: the logarithm has an angle of %.17g", name, th)
		}
		if xi[3]*back[3]+xi[4]*back[4]+xi[5]*back[5] < 0 { // half a turn: the other axis is as right
			compare(name, "log, then exp", preciseOf(4, hat(back)).series(1, 0).floats(), motion)
		} else {
			compare(name, "log", back[:], xi[:])
		}
	})
	t.Log("largest errors relative to the largest entry:", worst)
}

func flat(x *SE3) (v []float64) {
	for i := 0; i < 3; i++ {
		v = append(v, x.R[3*i:3*i+3]...)
		v = append(v, x.T[i])
	}
	return v
}

func TestPlaneAgainst300Bits(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	for _, th := range angles {
		for _, th := range []float64{th, -th} {
			name := fmt.Sprintf("angle %.17g", th)
			xi := [3]float64{10 * rng.NormFloat64(), rng.NormFloat64(), th}
			motion := preciseOf(3, []float64{0, -th, xi[0], th, 0, xi[1], 0, 0, 0}).series(1, 0).floats()
			x := Exp2(xi)
			near(t, name+": exp", []float64{x.C, -x.S, x.X, x.S, x.C, x.Y}, motion[:6], 1e-14)
			ad := []float64{0, -th, xi[1], th, 0, -xi[0], 0, 0, 0}
			jacobian := preciseOf(3, ad).series(-1, 1)
			j := Jr2(xi)
			near(t, name+": right Jacobian", j[:], jacobian.floats(), 1e-14)
			inverse := JrInv2(xi)
			near(t, name+": inverse right Jacobian", inverse[:], jacobian.inverse().floats(), 1e-14)
			a := x.Adjoint()
			near(t, name+": adjoint", a[:], preciseOf(3, ad).series(1, 0).floats(), 1e-14)
			rounded := SE2{motion[2], motion[5], motion[0], motion[3]}
			back := rounded.Log()
			near(t, name+": log", back[:], xi[:], 1e-14)
		}
	}
}

// The coefficients of the inverse Jacobian on both sides of the switch at .3, where a short series shows first. An error of k
// enters the Jacobian times th, one of b times th^3, beside entries of one (and the same times |rho| beside |rho|).
func TestInverseCoefficientsAtTheSwitch(t *testing.T) {
	for _, th := range []float64{.05, .1, .2, .29, math.Nextafter(.3, 0), .3, math.Nextafter(.3, 1), .31} {
		k, b := cotCoefficients(th * th)
		wantK, wantB := preciseCoefficients(th)
		if e := math.Abs(k-wantK) * th; !(e < 1e-15) {
			t.Errorf("angle %.17g: the first coefficient costs the Jacobian %.2g", th, e)
		}
		if e := math.Abs(b-wantB) * th * th * th; !(e < 1e-15) {
			t.Errorf("angle %.17g: the second coefficient costs the Jacobian %.2g", th, e)
		}
	}
}

// preciseCoefficients solves k and b from x cot x = 1 - 2 sum zeta(2n) (x/pi)^2n with x = th/2, that is
// k = sum_n |B_2n|/(2n)! th^(2n-2), Bernoulli's numbers by their recurrence.
func preciseCoefficients(th float64) (float64, float64) {
	const terms = 40
	bernoulli := make([]*big.Rat, 2*terms+1)
	for m := range bernoulli {
		sum := new(big.Rat)
		c := new(big.Int)
		for i := 0; i < m; i++ {
			c.Binomial(int64(m+1), int64(i))
			sum.Add(sum, new(big.Rat).Mul(new(big.Rat).SetInt(c), bernoulli[i]))
		}
		if m == 0 {
			bernoulli[0] = big.NewRat(1, 1)
			continue
		}
		bernoulli[m] = sum.Mul(sum, big.NewRat(-1, int64(m+1)))
	}
	k, b := number(0), number(0)
	u := number(th * th) // the package receives the rounded square
	power := number(1)   // u^(n-1)
	before := number(0)  // u^(n-2)
	for n := 1; n <= terms; n++ {
		f := new(big.Rat).SetInt(new(big.Int).MulRange(1, int64(2*n)))
		c := new(big.Float).SetPrec(bits).SetRat(new(big.Rat).Quo(new(big.Rat).Abs(bernoulli[2*n]), f))
		k.Add(k, new(big.Float).SetPrec(bits).Mul(c, power))
		d := new(big.Float).SetPrec(bits).Mul(c, before)
		b.Sub(b, d.Mul(d, number(float64(n-1))))
		before.Set(power)
		power.Mul(power, u)
	}
	x, _ := k.Float64()
	y, _ := b.Float64()
	return x, y
}
