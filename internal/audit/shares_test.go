package audit

import (
	"context"
	"math"
	"testing"
)

// What random vectors say of how groups check each other is what the whole redundancy matrix says.
func TestSharesAgainstTheWholeMatrix(t *testing.T) {
	s, verdicts := site3(t)
	w := &work{ctx: context.Background(), in: &Input{Survey: s, Verdicts: verdicts}, s: s}
	for _, phase := range []func() error{w.build, w.adjust, w.search} {
		if err := phase(); err != nil {
			t.Fatal(err)
		}
	}
	group := make([]int, len(w.all))
	groups := len(classNames) * len(s.Robots)
	for i := range group {
		group[i] = len(classNames)*w.owner[i] + int(w.sort[i])
	}
	want := make([]float64, groups*groups)
	redundancy := make([]float64, groups)
	vector := make([]float64, w.sigma.Scalars())
	for i, g := range group {
		d := w.derivative(w.all[i])
		l := root(w.info(w.all[i]), d.rows, *w.all[i].weight())
		for c := range d.rows {
			clear(vector)
			z := make([]float64, d.rows)
			z[c] = 1
			d.scatter(w.sigma, lower(l, z), 1, vector, len(vector))
			w.sigma.Apply(vector, 1)
			for j, h := range group {
				e := w.derivative(w.all[j])
				x := upper(root(w.info(w.all[j]), e.rows, *w.all[j].weight()), e.gather(w.sigma, vector, len(vector), 1))
				if i == j {
					x[c]--
					redundancy[g] -= x[c]
				}
				for _, v := range x {
					want[g*groups+h] += v * v
				}
			}
		}
	}
	got := w.shares(group, groups)
	// Since R R = R, a row of all groups adds up to the redundancy: exactly for the matrix, and for the vectors as far as they tell.
	for g := range groups {
		whole, told := 0.0, 0.0
		for h := range groups {
			a, b := want[g*groups+h], got[g*groups+h]
			whole, told = whole+a, told+b
			if math.Abs(a-b) > 0.25*math.Sqrt(want[g*groups+g]*want[h*groups+h])+0.05 {
				t.Errorf("groups %d and %d: %.3f, the whole matrix says %.3f", g, h, b, a)
			}
		}
		if math.Abs(whole-redundancy[g]) > 1e-6*(1+redundancy[g]) || math.Abs(told-redundancy[g]) > 0.25*redundancy[g]+0.05 {
			t.Errorf("group %d: %.6f and %.3f in all, redundancy %.6f", g, whole, told, redundancy[g])
		}
	}
}
