package reliability

import (
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// spreads runs the estimate on a linear net whose observations belong to groups.
func spreads(t *testing.T, n *linear, group []int, groups int) ([]Spread, bool) {
	t.Helper()
	full := make([]float64, len(group))
	out, arrived, err := Spreads(groups, 2000, func(scale []float64) (squares, redundancy []float64, err error) {
		for i, g := range group {
			full[i] = scale[g]
		}
		v, _, q := n.adjust(nil, full)
		squares, redundancy = make([]float64, groups), make([]float64, groups)
		for i, g := range group {
			f := n.figures(v, q, i, 1, full)
			squares[g] += v[i] * v[i] / n.sigma[i] / n.sigma[i] / scale[g]
			redundancy[g] += f.Total()
		}
		return squares, redundancy, nil
	}, func(scale []float64) ([]float64, error) {
		for i, g := range group {
			full[i] = scale[g]
		}
		return n.shared(group, groups, full), nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return out, arrived
}

// shared returns tr R_gh R_hg from the dense redundancy matrix.
func (n *linear) shared(group []int, groups int, scale []float64) []float64 {
	_, _, q := n.adjust(nil, scale)
	var aq, p mat.Dense
	aq.Mul(n.a, q)
	p.Mul(&aq, n.a.T())
	out := make([]float64, groups*groups)
	for i, g := range group {
		for j, h := range group {
			r := -p.At(i, j) / (n.sigma[i] * n.sigma[j] * math.Sqrt(scale[i]*scale[j]))
			if i == j {
				r++
			}
			out[g*groups+h] += r * r
		}
	}
	return out
}

// restricted is -2 log of the restricted likelihood of the groups' variance factors, up to a constant (Patterson and Thompson,
// Biometrika 58, 1971): log det C + log det A' C^-1 A + v' C^-1 v.
func restricted(t *testing.T, n *linear, group []int, scale []float64) float64 {
	full := make([]float64, len(group))
	for i, g := range group {
		full[i] = scale[g]
	}
	v, _, q := n.adjust(nil, full)
	sum := 0.0
	for i := range v {
		c := n.sigma[i] * n.sigma[i] * full[i]
		sum += math.Log(c) + v[i]*v[i]/c
	}
	det, sign := mat.LogDet(q)
	if sign <= 0 {
		t.Fatal("not positive")
	}
	return sum - det
}

// The estimate is a minimum of the restricted likelihood, found without it.
func TestSpreadsAreOfRestrictedLikelihood(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 1))
	for range 8 {
		n := randomNet(r, 60, 1, 6)
		group := make([]int, 60)
		truth := [3]float64{1, 9, 0.25}
		for i := range group {
			group[i] = i % 3
			n.l[i] = n.sigma[i] * math.Sqrt(truth[i%3]) * r.NormFloat64()
		}
		got, arrived := spreads(t, n, group, 3)
		if !arrived {
			t.Fatal("did not arrive")
		}
		scale := make([]float64, 3)
		for g := range scale {
			scale[g] = got[g].Ratio * got[g].Ratio
			if !got[g].Known || !(got[g].Low < got[g].Ratio && got[g].Ratio < got[g].High) {
				t.Errorf("group %d: %+v", g, got[g])
			}
		}
		at := restricted(t, n, group, scale)
		for g := range scale {
			for _, by := range []float64{0.93, 1.07} {
				moved := append([]float64(nil), scale...)
				moved[g] *= by
				if x := restricted(t, n, group, moved); x < at {
					t.Errorf("group %d times %g: %.8g, less than %.8g at the estimate", g, by, x, at)
				}
			}
		}
	}
}

// The bounds hold as often as they say, also where a group is checked by what is three times less certain than itself: each unknown
// is observed once by the one and once by the other, and some of them twice by the other.
func TestSpreadBoundsHoldWhereLittleChecks(t *testing.T) {
	r := rand.New(rand.NewPCG(6, 3))
	const unknowns, twice = 60, 20
	inside := [2]int{}
	const nets = 50
	for range nets {
		n := &linear{a: mat.NewDense(2*unknowns+twice, unknowns, nil)}
		var group []int
		add := func(x, g int, sigma float64) {
			n.a.Set(len(group), x, 1)
			n.l, n.sigma, group = append(n.l, sigma*r.NormFloat64()), append(n.sigma, sigma), append(group, g)
		}
		for x := range unknowns {
			add(x, 0, 1)
			add(x, 1, 3)
		}
		for x := range twice {
			add(x, 1, 3)
		}
		got, _ := spreads(t, n, group, 2)
		for g, s := range got {
			if !s.Known || s.Low <= 1 && 1 <= s.High {
				inside[g]++
			}
		}
	}
	for g, n := range inside {
		share := float64(n) / nets
		t.Logf("group %d: %.3f", g, share)
		if share < 0.88 { // of 50, three standard deviations below
			t.Errorf("group %d: the bounds hold in %.3f of the cases, expected about 0.95", g, share)
		}
	}
}

// The bounds hold as often as they say: of 900 groups about 95 %, the standard deviation of that count being 0.7 %.
func TestSpreadBoundsHold(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 9))
	inside, all := 0, 0
	truth := [3]float64{1, 2.3, 0.6} // of sigmas
	for range 300 {
		n := randomNet(r, 90, 1, 8)
		group := make([]int, 90)
		for i := range group {
			group[i] = i % 3
			n.l[i] = n.sigma[i] * truth[i%3] * r.NormFloat64()
		}
		got, _ := spreads(t, n, group, 3)
		for g, s := range got {
			all++
			if s.Low <= truth[g] && truth[g] <= s.High {
				inside++
			}
		}
	}
	if share := float64(inside) / float64(all); share < 0.925 || share > 0.975 {
		t.Errorf("the bounds hold in %.3f of the cases, expected 0.95", share)
	}
}

func TestSpreadsOfGroupsWithoutRedundancy(t *testing.T) {
	calls := 0
	ten := func([]float64) ([]float64, error) { return []float64{10}, nil }
	got, arrived, err := Spreads(2, 3, func(scale []float64) ([]float64, []float64, error) {
		calls++
		return []float64{100, 4 * 20 / scale[1]}, []float64{0.3, 20}, nil
	}, func([]float64) ([]float64, error) { return []float64{0.3, 0, 0, 20}, nil })
	if err != nil || !arrived || calls != 2 {
		t.Fatalf("%v %v after %d evaluations", err, arrived, calls)
	}
	if got[0].Known || got[0].Ratio != 1 || math.Abs(got[1].Ratio-2) > 1e-12 {
		t.Errorf("%+v", got)
	}
	if _, arrived, _ := Spreads(1, 2, func(scale []float64) ([]float64, []float64, error) { return []float64{30}, []float64{10}, nil }, ten); arrived {
		t.Error("arrived although the last round changed the sigma")
	}
	if got, arrived, _ := Spreads(1, 8, func([]float64) ([]float64, []float64, error) { return []float64{0}, []float64{10}, nil }, ten); !arrived || got[0].Ratio != 1e-3 {
		t.Errorf("data without error: %+v, arrived %v", got, arrived)
	}
	broken := errors.New("no")
	if _, _, err := Spreads(1, 2, func([]float64) ([]float64, []float64, error) { return nil, nil, broken }, ten); err != broken {
		t.Errorf("error %v", err)
	}
}
