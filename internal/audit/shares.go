package audit

import (
	"math"
	"math/rand/v2"
)

// Each group is probed by so many random vectors that they have about that many measurements together, within bounds; each costs one
// solution.
const (
	probed     = 600
	mostProbes = 12
)

// shares estimates tr R_gh R_hg for all pairs of groups, R being the redundancy matrix of the measurements scaled to unit variance: the
// mean square of what R makes in group h of a random vector of signs in group g (Hutchinson, 'A Stochastic Estimator of the Trace of
// the Influence Matrix', Communications in Statistics 18, 1989). Group is that of each measurement, -1 for those of none. The weights and
// the covariance are those of the estimates.
func (w *work) shares(group []int, groups int) []float64 {
	roots := make([][]float64, len(w.all))
	derivatives := make([]derivative, len(w.all))
	members := make([][]int, groups)
	for i, g := range group {
		if g >= 0 && !w.alone[i] {
			m := w.all[i]
			roots[i], derivatives[i] = root(w.info(m), len(w.parts(m)), *m.weight()), w.derivative(m)
			members[g] = append(members[g], i)
		}
	}
	out := make([]float64, groups*groups)
	random := rand.New(rand.NewPCG(7, 7))
	scalars := w.sigma.Scalars()
	vector := make([]float64, scalars)
	signs := make([][]float64, len(w.all))
	for g, own := range members {
		if len(own) == 0 {
			continue
		}
		probes := min(mostProbes, 1+probed/len(own))
		for range probes {
			clear(vector)
			for _, i := range own {
				d, f := &derivatives[i], roots[i]
				n := d.rows
				z := make([]float64, n)
				for r := range z {
					if f[r*(n+1)] > 0 {
						z[r] = float64(2*random.IntN(2) - 1)
					}
				}
				signs[i] = z
				d.scatter(w.sigma, lower(f, z), 1, vector, scalars)
			}
			w.sigma.Apply(vector, 1)
			for i, h := range group {
				if h < 0 || w.alone[i] {
					continue
				}
				d := &derivatives[i]
				back := upper(roots[i], d.gather(w.sigma, vector, scalars, 1))
				for r, x := range back {
					if h == g {
						x -= signs[i][r]
					}
					out[g*groups+h] += x * x / float64(probes)
				}
			}
		}
	}
	return out
}

// root returns the lower triangle L with L L' = weight times a matrix of n rows; what was not measured has a zero column.
func root(m []float64, n int, weight float64) []float64 {
	l := make([]float64, n*n)
	for c := range n {
		d := weight * m[c*n+c]
		least := 1e-12 * d
		for k := range c {
			d -= l[c*n+k] * l[c*n+k]
		}
		if !(d > least) {
			continue
		}
		l[c*n+c] = math.Sqrt(d)
		for r := c + 1; r < n; r++ {
			x := weight * m[r*n+c]
			for k := range c {
				x -= l[r*n+k] * l[c*n+k]
			}
			l[r*n+c] = x / l[c*n+c]
		}
	}
	return l
}

// lower returns L z, upper L' z.
func lower(l, z []float64) []float64 {
	n := len(z)
	out := make([]float64, n)
	for r := range n {
		for c := range r + 1 {
			out[r] += l[r*n+c] * z[c]
		}
	}
	return out
}

func upper(l, z []float64) []float64 {
	n := len(z)
	out := make([]float64, n)
	for r := range n {
		for c := range r + 1 {
			out[c] += l[r*n+c] * z[r]
		}
	}
	return out
}
