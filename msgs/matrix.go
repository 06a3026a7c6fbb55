package msgs

import "math"

// A symmetric positive semidefinite matrix crosses as the rows of a lower triangular L with L L' = M. L is computed as
// the Cholesky factor of the unit-diagonal scaling of M (van der Sluis, "Condition numbers and equilibration of matrices",
// Numerische Mathematik 14, 1969) and its rows are then multiplied by the scales, so the length of a row is its scale and
// both cross in one number. Rounding each entry to float32 changes M by at most d 6e-8 sqrt(m_ii m_jj), and whatever the
// rounding or the sender does, L L' has no negative eigenvalue.

// indefinite is the most negative pivot of the scaled matrix that still counts as rounding of a semidefinite one.
const indefinite = 1e-6

// appendFactor appends the factor of m, d x d row-major, lower triangle by rows.
//
// A pivot p that rounding left at or below the noise level nu = max(4 d eps, -p) cannot be told from zero. If the rest of
// its column is noise as well the column becomes zero, which keeps an exact null space; otherwise the pivot is raised to
// nu, which changes m_ii by less than 2 nu m_ii.
func appendFactor(dst, m []float64, d int) ([]float64, error) {
	scale := make([]float64, d)
	largest := 0.0
	for i := range d {
		largest = max(largest, m[i*d+i])
	}
	for i := range d {
		if m[i*d+i] < -1e-9*largest {
			return nil, wrong("matrix", m[i*d+i], "no negative number on the diagonal")
		}
		scale[i] = math.Sqrt(max(m[i*d+i], 0))
	}
	l := make([]float64, d*d)
	for i := range d {
		for j := range i {
			a, b := m[i*d+j], m[j*d+i]
			s := scale[i] * scale[j]
			if math.Abs(a-b) > 1e-9*s+1e-9*max(math.Abs(a), math.Abs(b)) {
				return nil, wrong("matrix", math.Abs(a-b), "a symmetric matrix; rows %d and %d differ", i, j)
			}
			if s > 0 {
				l[i*d+j] = (a + b) / 2 / s
			} else if math.Abs(a) > 1e-9*math.Sqrt(largest)*max(scale[i], scale[j]) {
				return nil, wrong("matrix", a, "a semidefinite matrix: 0 beside the 0 on its diagonal")
			}
		}
		if scale[i] > 0 {
			l[i*d+i] = 1
		}
	}
	for j := range d {
		rj := l[j*d : j*d+j]
		p := l[j*d+j] - dot(rj, rj)
		if p < -indefinite {
			return nil, wrong("matrix", p, "a semidefinite matrix: a scaled pivot of at least -%g", indefinite)
		}
		most := 0.0
		for i := j + 1; i < d; i++ {
			l[i*d+j] -= dot(l[i*d:i*d+j], rj)
			most = max(most, math.Abs(l[i*d+j]))
		}
		if noise := max(float64(4*d)*0x1p-52, -p); p <= noise {
			p = noise
			if most <= 8*noise {
				p = 0
			}
		}
		root, inv := math.Sqrt(p), 0.0
		if p > 0 {
			inv = 1 / root
		}
		l[j*d+j] = root
		for i := j + 1; i < d; i++ {
			l[i*d+j] *= inv
		}
	}
	for i := range d {
		for j := range i + 1 {
			dst = append(dst, l[i*d+j]*scale[i])
		}
	}
	return dst, nil
}

// appendFactor32 is appendFactor rounded to float32.
func appendFactor32(dst []float32, m []float64, d int) ([]float32, error) {
	l, err := appendFactor(nil, m, d)
	if err != nil {
		return nil, err
	}
	for _, x := range l {
		if math.Abs(x) > math.MaxFloat32 {
			return nil, wrong("matrix", x*x, "numbers whose root float32 can hold")
		}
		dst = append(dst, float32(x))
	}
	return dst, nil
}

// expand writes L L' into m, d x d row-major.
func expand[F float32 | float64](m []float64, l []F, d int) {
	wide := make([]float64, len(l))
	for i, x := range l {
		wide[i] = float64(x)
	}
	for i, at := 0, 0; i < d; i++ {
		ri := wide[at : at+i+1]
		at += i + 1
		for j, from := 0, 0; j <= i; j++ {
			rj := wide[from : from+j+1]
			from += j + 1
			v := dot(rj, ri[:j+1])
			m[i*d+j], m[j*d+i] = v, v
		}
	}
}

func dot(a, b []float64) float64 {
	b = b[:len(a)]
	sum := 0.0
	for i, x := range a {
		sum += x * b[i]
	}
	return sum
}

// triangle is how many numbers the lower triangle of a d x d matrix has.
func triangle(d int) int { return d * (d + 1) / 2 }
