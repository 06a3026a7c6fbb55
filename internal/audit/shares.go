package audit

import (
	"math"
	"math/rand/v2"

	"selvage/internal/sparse"
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
	type probe struct {
		group int
		signs [][]float64 // of each member
	}
	var probes []probe
	random := rand.New(rand.NewPCG(7, 7))
	for g, own := range members {
		if len(own) == 0 {
			continue
		}
		for range min(mostProbes, 1+probed/len(own)) {
			p := probe{g, make([][]float64, len(own))}
			for k, i := range own {
				f, n := roots[i], derivatives[i].rows
				z := make([]float64, n)
				for r := range z {
					if f[r*(n+1)] > 0 {
						z[r] = float64(2*random.IntN(2) - 1)
					}
				}
				p.signs[k] = z
			}
			probes = append(probes, p)
		}
	}
	out := make([]float64, groups*groups)
	scalars := w.sigma.Scalars()
	together := min(sparse.Together, len(probes)) // one way through the factor serves them all
	vectors := make([]float64, together*scalars)
	place := make([]int, len(w.all)) // among the members of its group
	for _, own := range members {
		for k, i := range own {
			place[i] = k
		}
	}
	for len(probes) > 0 {
		batch := probes[:min(together, len(probes))]
		probes = probes[len(batch):]
		n := len(batch)
		clear(vectors[:n*scalars])
		for c, p := range batch {
			for k, i := range members[p.group] {
				derivatives[i].scatter(w.sigma, lower(roots[i], p.signs[k]), 1, vectors[c*scalars:], scalars)
			}
		}
		w.sigma.Apply(vectors[:n*scalars], n)
		for i, h := range group {
			if h < 0 || w.alone[i] {
				continue
			}
			d := &derivatives[i]
			seen, one := d.gather(w.sigma, vectors, scalars, n), make([]float64, d.rows)
			for c, p := range batch {
				for r := range one {
					one[r] = seen[r*n+c]
				}
				share := float64(min(mostProbes, 1+probed/len(members[p.group])))
				for r, x := range upper(roots[i], one) {
					if h == p.group {
						x -= p.signs[place[i]][r]
					}
					out[p.group*groups+h] += x * x / share
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
