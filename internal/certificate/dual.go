package certificate

import (
	"math"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// dual is the matrix S of the package comment, one block row for each pose: first its row t', then the rows of R'. Rows that a block has
// beyond these, in space the last two, hold a unit pivot.
type dual struct {
	m      int // rows of a rotation: 2 or 3
	width  int // of a block
	matrix *sparse.Matrix
	factor *sparse.Factor
	scale  float64 // mean of the diagonal
	tol    float64 // that has been added to the diagonal

	gauge     [][]float64 // what S takes to zero: m columns of Y and the shift, orthonormal within each component
	component []int32     // of each pose
	parts     int
}

// newDual fills S at the poses.
func newDual(c *surrogate, poses []lie.SE3, component []int32, parts int) (*dual, error) {
	s := &dual{m: 3, width: 6, component: component, parts: parts}
	if c.plane {
		s.m, s.width = 2, 3
	}
	pattern := sparse.Pattern{Dims: make([]int, len(poses))}
	for i := range pattern.Dims {
		pattern.Dims[i] = s.width
	}
	slot := make([]int32, len(c.i))
	known := make(map[[2]int32]int32, len(c.i))
	for k := range c.i {
		pair := [2]int32{min(c.i[k], c.j[k]), max(c.i[k], c.j[k])}
		n, ok := known[pair]
		if !ok {
			n = int32(len(pattern.Pairs))
			known[pair] = n
			pattern.Pairs = append(pattern.Pairs, pair)
		}
		slot[k] = n
	}
	symbolic, err := sparse.Analyse(pattern, sparse.Options{Workers: 2})
	if err != nil {
		return nil, err
	}
	s.matrix, s.factor = symbolic.NewMatrix(), sparse.NewFactor(symbolic)
	multiplier := make([]lie.Mat3, len(poses)) // (M Y)_i R_i, rows of the rotation
	for k := range c.i {
		s.measure(c, k, poses, slot[k], multiplier)
	}
	for i := range poses {
		d := s.matrix.Diag(i)
		for a := range s.m {
			for b := range s.m {
				d[(1+a)*s.width+1+b] -= (multiplier[i][3*a+b] + multiplier[i][3*b+a]) / 2
			}
		}
		for a := 1 + s.m; a < s.width; a++ {
			d[a*(s.width+1)] = 1
		}
		for a := range 1 + s.m {
			s.scale += d[a*(s.width+1)] / float64(len(poses)*(1+s.m))
		}
	}
	s.findGauge(poses)
	return s, nil
}

// measure adds what a factor has in M, and in the multipliers.
func (s *dual) measure(c *surrogate, k int, poses []lie.SE3, slot int32, multiplier []lie.Mat3) {
	i, j, z, w := c.i[k], c.j[k], &c.z[k], s.width
	kappa, tau := c.kappa[k], c.tau[k]
	di, dj, off := s.matrix.Diag(int(i)), s.matrix.Diag(int(j)), s.matrix.Off(int(slot))
	at := func(r, q int) *float64 { // of the block in row i, column j
		if i < j {
			return &off[r*w+q]
		}
		return &off[q*w+r]
	}
	di[0] += tau
	dj[0] += tau
	*at(0, 0) -= tau
	for a := range s.m {
		di[1+a] += tau * z.T[a]
		di[(1+a)*w] += tau * z.T[a]
		*at(1+a, 0) -= tau * z.T[a]
		dj[(1+a)*(w+1)] += kappa
		di[(1+a)*(w+1)] += kappa
		for b := range s.m {
			di[(1+a)*w+1+b] += tau * z.T[a] * z.T[b]
			*at(1+a, 1+b) -= kappa * z.R[3*a+b]
		}
	}
	// Rows of (M Y): kappa (R_j' - R_ij' R_i') for j; for i minus R_ij times that, and minus tau t_ij (t_j - t_i - R_i t_ij)'.
	x, y := &poses[i], &poses[j]
	rel := x.R.T().Mul(y.R)
	e := z.R.T().Mul(rel)
	var shift [3]float64
	ahead := x.R.Apply(z.T)
	for a := range shift {
		shift[a] = y.T[a] - x.T[a] - ahead[a]
	}
	seen := x.R.T().Apply(shift) // times R_i
	for a := range 3 {
		for b := range 3 {
			one := 0.0
			if a == b {
				one = 1
			}
			multiplier[j][3*a+b] += kappa * (one - e[3*a+b])                               // kappa (I - E)
			multiplier[i][3*a+b] += kappa*(one-mul(&z.R, &rel, a, b)) - tau*z.T[a]*seen[b] // kappa (I - R_ij P')
		}
	}
}

// mul returns an entry of A B'.
func mul(a, b *lie.Mat3, r, c int) float64 {
	return a[3*r]*b[3*c] + a[3*r+1]*b[3*c+1] + a[3*r+2]*b[3*c+2]
}

// factorise computes the factor of S + tol I and reports whether it is positive.
func (s *dual) factorise(tol float64) bool {
	for i := range s.component {
		d := s.matrix.Diag(i)
		for a := range 1 + s.m {
			d[a*(s.width+1)] += tol - s.tol
		}
	}
	s.tol = tol
	return s.factor.Factorise(s.matrix) == nil
}

// findGauge makes the vectors that S takes to zero: a shift, and the columns of Y.
func (s *dual) findGauge(poses []lie.SE3) {
	n := len(poses) * s.width
	// Y may be shifted: with the middle of each component at zero the vectors are nearly orthogonal to begin with.
	middle, size := make([][3]float64, s.parts), make([]float64, s.parts)
	for i := range poses {
		c := s.component[i]
		size[c]++
		for a, t := range poses[i].T {
			middle[c][a] += t
		}
	}
	for v := range s.m + 1 {
		x := make([]float64, n)
		for i := range poses {
			block := x[i*s.width:]
			if v == s.m {
				block[0] = 1
				continue
			}
			c := s.component[i]
			block[0] = poses[i].T[v] - middle[c][v]/size[c]
			for a := range s.m {
				block[1+a] = poses[i].R[3*v+a]
			}
		}
		s.clean(x)
		s.normalise(x)
		s.gauge = append(s.gauge, x)
	}
}

// dots returns the inner product of two vectors within each component.
func (s *dual) dots(x, y []float64) []float64 {
	sum := make([]float64, s.parts)
	for i, c := range s.component {
		for a := range 1 + s.m {
			sum[c] += x[i*s.width+a] * y[i*s.width+a]
		}
	}
	return sum
}

// clean takes the gauge out of a vector, and what the rows beyond a block have.
func (s *dual) clean(x []float64) {
	for _, g := range s.gauge {
		along := s.dots(g, x)
		for i, c := range s.component {
			for a := range 1 + s.m {
				x[i*s.width+a] -= along[c] * g[i*s.width+a]
			}
		}
	}
	for i := range s.component {
		for a := 1 + s.m; a < s.width; a++ {
			x[i*s.width+a] = 0
		}
	}
}

// normalise gives the vector unit length within each component.
func (s *dual) normalise(x []float64) {
	square := s.dots(x, x)
	for i, c := range s.component {
		if square[c] > 0 {
			for a := range 1 + s.m {
				x[i*s.width+a] /= math.Sqrt(square[c])
			}
		}
	}
}
