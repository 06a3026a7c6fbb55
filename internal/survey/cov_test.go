package survey

import (
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// randomCov draws sigmas over eight decades and the correlations of a random
// Gram matrix; about one component in four was not measured.
func randomCov(r *rand.Rand) (c Cov) {
	var g [6][8]float64
	for i := range g {
		for k := range g[i] {
			g[i][k] = r.NormFloat64()
		}
		c.Sigma[i] = math.Pow(10, -4+8*r.Float64())
		if r.IntN(4) == 0 {
			c.Sigma[i] = inf
		}
	}
	dot := func(i, j int) (s float64) {
		for k := range g[i] {
			s += g[i][k] * g[j][k]
		}
		return s
	}
	k := 0
	for i := range 6 {
		for j := i + 1; j < 6; j++ {
			if !math.IsInf(c.Sigma[i], 1) && !math.IsInf(c.Sigma[j], 1) {
				c.Corr[k] = dot(i, j) / math.Sqrt(dot(i, i)*dot(j, j))
			}
			k++
		}
	}
	return c
}

// The information times the covariance, both scaled to correlations, is the
// identity on the measured components and zero elsewhere.
func TestInformationInvertsTheCovariance(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for range 2000 {
		c := randomCov(r)
		for _, dim := range []int{2, 3} {
			info, err := c.Information(dim)
			if err != nil {
				t.Fatal(err)
			}
			for i := range 6 {
				for j := range 6 {
					sum, scale, want := 0.0, 1.0, 0.0
					for k := range 6 {
						if info[6*i+k] == 0 || !measured(c, k, dim) {
							continue
						}
						x := info[6*i+k] * c.Sigma[i] * c.Sigma[k] * correlation(c, k, j)
						sum += x
						scale = max(scale, math.Abs(x))
					}
					if !measured(c, j, dim) {
						sum = info[6*i+j]
					}
					if i == j && measured(c, i, dim) {
						want = 1
					}
					if math.Abs(sum-want) > 1e-11*scale {
						t.Fatalf("dimension %d, %v: entry %d, %d of the product is %g, want %g", dim, c, i, j, sum, want)
					}
					if info[6*i+j] != info[6*j+i] {
						t.Fatalf("not symmetric at %d, %d", i, j)
					}
				}
			}
		}
	}
}

func measured(c Cov, i, dim int) bool {
	return !math.IsInf(c.Sigma[i], 1) && (dim == 3 || i == 0 || i == 1 || i == 5)
}

func correlation(c Cov, i, j int) float64 {
	if i == j {
		return 1
	}
	i, j = min(i, j), max(i, j)
	k := 0
	for a := range 6 {
		for b := a + 1; b < 6; b++ {
			if a == i && b == j {
				return c.Corr[k]
			}
			k++
		}
	}
	panic("no such pair")
}

func TestCovarianceComesBack(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	for range 2000 {
		c := randomCov(r)
		info, err := c.Information(3)
		if err != nil {
			t.Fatal(err)
		}
		back, err := CovFromInformation(info, 3)
		if err != nil {
			t.Fatal(err)
		}
		for i := range 6 {
			if !(math.Abs(back.Sigma[i]/c.Sigma[i]-1) < 1e-10) && !(math.IsInf(back.Sigma[i], 1) && math.IsInf(c.Sigma[i], 1)) {
				t.Fatalf("sigma %d is %g, want %g", i, back.Sigma[i], c.Sigma[i])
			}
		}
		for k := range c.Corr {
			if math.Abs(back.Corr[k]-c.Corr[k]) > 1e-10 {
				t.Fatalf("correlation %d is %g, want %g", k, back.Corr[k], c.Corr[k])
			}
		}
	}
}

// Weights that differ by twelve decades and more cost nothing: the condition
// number that counts is that of the matrix scaled to unit diagonal.
func TestConditionFromUnitsCostsNothing(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	steepest := 0.0
	for range 1000 {
		c := randomCov(r)
		m, err := c.Information(3)
		if err != nil {
			t.Fatal(err)
		}
		back, err := CovFromInformation(m, 3)
		if err != nil {
			t.Fatal(err)
		}
		got, err := back.Information(3)
		if err != nil {
			t.Fatal(err)
		}
		if d := scaledDifference(got, m); d > 1e-12 {
			t.Fatalf("differs by %g of its diagonal", d)
		}
		lo, hi := inf, 0.0
		for i := range 6 {
			if d := m[7*i]; d > 0 {
				lo, hi = min(lo, d), max(hi, d)
			}
		}
		steepest = max(steepest, hi/lo)
	}
	if steepest < 1e12 {
		t.Errorf("weights differ by a factor of %g at most, want a harder test", steepest)
	}
}

func TestCovFromInformationInThePlane(t *testing.T) {
	m := [36]float64{0: 4, 5: 1, 30: 1, 7: 16, 14: 9, 35: 1} // x, rz correlated; z too
	c, err := CovFromInformation(m, 2)
	if err != nil {
		t.Fatal(err)
	}
	// Inverse of [4 1; 1 1] is [1 -1; -1 4]/3.
	want := Cov{Sigma: [6]float64{math.Sqrt(1. / 3), 0.25, inf, inf, inf, math.Sqrt(4. / 3)}}
	want.Corr[4] = -0.5
	for i := range 6 {
		if c.Sigma[i] != want.Sigma[i] && !(math.Abs(c.Sigma[i]-want.Sigma[i]) < 1e-15) {
			t.Errorf("sigma %d is %g, want %g", i, c.Sigma[i], want.Sigma[i])
		}
	}
	for k := range c.Corr {
		if math.Abs(c.Corr[k]-want.Corr[k]) > 1e-15 {
			t.Errorf("correlation %d is %g, want %g", k, c.Corr[k], want.Corr[k])
		}
	}
}

func TestCovRefusals(t *testing.T) {
	one := Uncorrelated(1, 1)
	with := func(change func(*Cov)) Cov {
		c := one
		change(&c)
		return c
	}
	for name, c := range map[string]Cov{
		"sigma zero":      with(func(c *Cov) { c.Sigma[2] = 0 }),
		"sigma negative":  with(func(c *Cov) { c.Sigma[2] = -1 }),
		"sigma NaN":       with(func(c *Cov) { c.Sigma[2] = math.NaN() }),
		"correlation 2":   with(func(c *Cov) { c.Corr[0] = 2 }),
		"correlation NaN": with(func(c *Cov) { c.Corr[0] = math.NaN() }),
		"not measured":    with(func(c *Cov) { c.Corr[0] = 0.5; c.Sigma[1] = inf }),
		"singular":        with(func(c *Cov) { c.Corr[14] = -1 }),
		"indefinite":      with(func(c *Cov) { c.Corr[0], c.Corr[1], c.Corr[5] = 0.9, 0.9, -0.9 }),
	} {
		if _, err := c.Information(3); err == nil {
			t.Errorf("%s: no error", name)
		}
	}
	if _, err := one.Information(4); err == nil {
		t.Error("dimension 4: no error")
	}
	id := [36]float64{0: 1, 7: 1, 14: 1, 21: 1, 28: 1, 35: 1}
	for name, change := range map[string]func(*[36]float64){
		"negative":           func(m *[36]float64) { m[7] = -1 },
		"infinite":           func(m *[36]float64) { m[7] = inf },
		"NaN":                func(m *[36]float64) { m[7] = math.NaN() },
		"NaN off-diagonal":   func(m *[36]float64) { m[1], m[6] = math.NaN(), math.NaN() },
		"indefinite":         func(m *[36]float64) { m[1], m[6] = 1.1, 1.1 },
		"singular":           func(m *[36]float64) { m[1], m[6] = 1, 1 },
		"beside a zero":      func(m *[36]float64) { m[0], m[1], m[6] = 0, 1e-12, 1e-12 },
		"sigma out of range": func(m *[36]float64) { m[0] = 1e-30 },
	} {
		m := id
		change(&m)
		if _, err := CovFromInformation(m, 3); err == nil {
			t.Errorf("%s: no error", name)
		}
	}
	if _, err := CovFromInformation(id, 1); err == nil {
		t.Error("dimension 1: no error")
	}
}

// Whether a correlation matrix is refused, and in which words, follows its
// eigenvalues; the ones in between are decided by the Cholesky factor.
func TestVerdictFollowsEigenvalues(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	var fine, singular, indefinite int
	for range 3000 {
		// A rotated diagonal with one eigenvalue around zero, scaled to unit
		// diagonal afterwards.
		var q mat.QR
		a := mat.NewDense(6, 6, nil)
		for i := range 6 {
			for j := range 6 {
				a.Set(i, j, r.NormFloat64())
			}
		}
		q.Factorize(a)
		var u mat.Dense
		q.QTo(&u)
		values := []float64{math.Pow(10, -20*r.Float64()), 1, 1, 1, 1, 1}
		if r.IntN(2) == 0 {
			values[0] = -values[0]
		}
		var m mat.Dense
		m.Product(&u, mat.NewDiagDense(6, values), u.T())
		var c Cov
		c.Sigma = Uncorrelated(1, 1).Sigma
		sym := mat.NewSymDense(6, nil)
		k := 0
		for i := range 6 {
			sym.SetSym(i, i, 1)
			for j := i + 1; j < 6; j++ {
				c.Corr[k] = m.At(i, j) / math.Sqrt(m.At(i, i)*m.At(j, j))
				sym.SetSym(i, j, c.Corr[k])
				k++
			}
		}
		if !(math.Abs(c.Corr[0]) < 1) { // a diagonal entry below zero
			continue
		}
		lo, hi := extremeEigenvalues(sym)
		err := c.checkCorrelation()
		switch {
		case lo < -1e-9*hi:
			indefinite++
			if !errors.Is(err, errNotPSD) {
				t.Fatalf("eigenvalues %g to %g: %v, want not positive semidefinite", lo, hi, err)
			}
		case lo > 1e-11:
			fine++
			if err != nil {
				t.Fatalf("eigenvalues %g to %g: %v", lo, hi, err)
			}
		case lo < -1e-12:
			singular++
			if !errors.Is(err, errSingular) {
				t.Fatalf("eigenvalues %g to %g: %v, want singular", lo, hi, err)
			}
		}
	}
	if fine < 100 || singular < 100 || indefinite < 100 {
		t.Errorf("only %d fine, %d singular, %d indefinite", fine, singular, indefinite)
	}
}
