package audit

import (
	"math"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// Correlations of tests, read from the vectors of the shifts, against the joint covariance of all four ends; and for ties of one
// component, which have one normalised residual each, against the correlation of these.
func TestCorrelationsAgainstTheJointCovariance(t *testing.T) {
	single, several := 0, 0
	for seed := range uint64(4) {
		s, verdicts := sighted(seed, 1e-4)
		w := phases(t, s, verdicts)
		var jobs []*Tie
		for k := range w.out.Ties {
			if x := &w.out.Ties[k]; x.held && x.T != nil {
				jobs = append(jobs, x)
			}
		}
		c := w.newComparison(jobs)
		for k := range jobs {
			w.follow(jobs[k:k+1], c)
			var got []float64
			for l := k + 1; l < len(jobs); l++ {
				got = append(got, c.correlation(&c.all[k], &c.all[l], c.all[k].unload(), 0))
			}
			for i, c := range got {
				want := jointCorrelation(t, w, jobs[k], jobs[k+1+i])
				near(t, jobs[k].ID+" and "+jobs[k+1+i].ID, c, want, 1e-5)
				if len(jobs[k].Parts) == 1 && len(jobs[k+1+i].Parts) == 1 {
					single++
				} else {
					several++
				}
			}
		}
	}
	if single < 1 || several < 50 {
		t.Errorf("only %d and %d pairs", single, several)
	}
}

// jointCorrelation computes it from the covariance of the residuals, each whitened by its own inverse root.
func jointCorrelation(t *testing.T, w *work, a, b *Tie) float64 {
	t.Helper()
	da, db := w.derivative(a.m), w.derivative(b.m)
	variables := []int32{da.at[0], da.at[1], db.at[0], db.at[1]}
	joint, err := w.solver.Joint(variables)
	if err != nil {
		t.Fatal(err)
	}
	if w.sigma, err = w.solver.Covariance(); err != nil {
		t.Fatal(err)
	}
	d := w.d
	q := mat.NewDense(4*d, 4*d, joint)
	jac := func(x *derivative, from int) *mat.Dense {
		j := mat.NewDense(x.rows, 4*d, nil)
		for e := range x.by {
			for r := range x.rows {
				for c := range d {
					j.Set(r, from+e*d+c, x.by[e][r*d+c])
				}
			}
		}
		return j
	}
	ja, jb := jac(&da, 0), jac(&db, 2*d)
	var cross, jq mat.Dense
	jq.Mul(ja, q)
	cross.Mul(&jq, jb.T()) // of the residuals, but for its sign
	root := func(x *Tie, j *mat.Dense) *mat.Dense {
		n := len(x.Parts)
		var omega, cov mat.Dense
		if err := omega.Inverse(mat.NewDense(n, n, w.info(x.m))); err != nil {
			t.Fatal(err)
		}
		var jq, p mat.Dense
		jq.Mul(j, q)
		p.Mul(&jq, j.T())
		cov.Sub(&omega, &p)
		sym := mat.NewSymDense(n, nil)
		for i := range n {
			for k := i; k < n; k++ {
				sym.SetSym(i, k, cov.At(i, k))
			}
		}
		var inverse mat.Dense
		if err := inverse.Inverse(sym); err != nil {
			t.Fatal(err)
		}
		return &inverse
	}
	// The sum of the squared canonical correlations is the trace of Ca^-1 C Cb^-1 C'.
	var left, right, all mat.Dense
	left.Mul(root(a, ja), &cross)
	right.Mul(root(b, jb), cross.T())
	all.Mul(&left, &right)
	return math.Sqrt(mat.Trace(&all) / float64(min(len(a.Parts), len(b.Parts))))
}

// Three ties of one pair of keyframes, the third with sigmas ten or twenty times as large: with V its variance over that of the others the
// mean has the variance q = 1 / (2 + 1/V), and the residuals of the first two the correlation q / (1 - q), by hand.
func TestTiesHardlyToldApart(t *testing.T) {
	for _, c := range []struct {
		times float64
		told  bool
	}{{5, true}, {20, false}} {
		s, verdicts := tracks(3, 100, 100, 100)
		for i := range s.Ties[2].Cov.Sigma {
			s.Ties[2].Cov.Sigma[i] *= c.times
		}
		a := run(t, s, verdicts)
		if c.told {
			if len(a.Near) != 0 {
				t.Errorf("%g times: hardly told apart %+v, want none", c.times, a.Near)
			}
			continue
		}
		if len(a.Near) != 1 || !slices.Equal(a.Near[0].Ties, []string{"t0", "t1"}) {
			t.Fatalf("%g times: hardly told apart %+v, want t0 and t1", c.times, a.Near)
		}
		q := 1 / (2 + 1/(c.times*c.times))
		near(t, "correlation", a.Near[0].Correlation, q/(1-q), 1e-6)
	}
}
