package msgs

import "math"

// A symmetric positive semidefinite matrix crosses as the rows of a lower triangular L with L L' = M. L is computed as
// the Cholesky factor of the unit-diagonal scaling of M (van der Sluis, "Condition numbers and equilibration of matrices",
// Numerische Mathematik 14, 1969) and its rows are then multiplied by the scales, so the length of a row is its scale and
// both cross in one number. Rounding each entry to float32 changes M by at most d 6e-8 sqrt(m_ii m_jj), and whatever the
// rounding or the sender does, L L' has no negative eigenvalue.

// indefinite is how far the scaled matrix may be from a semidefinite one and still pass for one that was rounded.
const indefinite = 1e-6

// tiny is the length of a row of L below which it counts as zero: squares of float32 reach down to it.
const tiny = 1e-35

// appendFactor appends the factor of m, d x d row-major, lower triangle by rows.
func appendFactor(dst, m []float64, d int) ([]float64, error) {
	a, scale, err := equilibrate(m, d)
	if err != nil {
		return nil, err
	}
	l := append([]float64(nil), a...)
	if !cholesky(l, d) {
		if err := semidefinite(l, a, d); err != nil {
			return nil, err
		}
	}
	for i := range d {
		for j := range i + 1 {
			dst = append(dst, l[i*d+j]*scale[i])
		}
	}
	return dst, nil
}

// equilibrate divides row and column i of m by the root of m_ii, so that the diagonal becomes one, or zero.
func equilibrate(m []float64, d int) (a, scale []float64, err error) {
	a, scale = make([]float64, d*d), make([]float64, d)
	largest := tiny * tiny
	for i := range d {
		largest = max(largest, m[i*d+i])
	}
	for i := range d {
		if m[i*d+i] < -1e-9*largest {
			return nil, nil, wrong("matrix", m[i*d+i], "no negative number on the diagonal")
		}
		if m[i*d+i] > tiny*tiny {
			scale[i], a[i*d+i] = math.Sqrt(m[i*d+i]), 1
		}
	}
	for i := range d {
		for j := range i {
			x, y := m[i*d+j], m[j*d+i]
			s := scale[i] * scale[j]
			if math.Abs(x-y) > 1e-9*max(s, math.Abs(x), math.Abs(y)) {
				return nil, nil, wrong("matrix", math.Abs(x-y), "a symmetric matrix; rows %d and %d differ", i, j)
			}
			if s > 0 {
				a[i*d+j] = (x/2 + y/2) / s
				a[j*d+i] = a[i*d+j]
			} else if math.Abs(x) > max(1e-9*math.Sqrt(largest), tiny)*max(scale[i], scale[j], tiny) {
				return nil, nil, wrong("matrix", x, "a semidefinite matrix: 0 beside the 0 on its diagonal")
			}
		}
	}
	return a, scale, nil
}

// cholesky overwrites the lower triangle of a with its factor. It gives up when a pivot cannot be told from zero. When it
// does not, the factor is that of a matrix within (d+1) eps of a (Higham, "Accuracy and Stability of Numerical
// Algorithms", 2nd edition 2002, theorem 10.3), whatever the condition.
func cholesky(a []float64, d int) bool {
	for j := range d {
		if a[j*d+j] == 0 { // a row and column of zeros
			continue
		}
		rj := a[j*d : j*d+j]
		p := a[j*d+j] - dot(rj, rj)
		if p <= float64(d)*0x1p-52 {
			return false
		}
		root := math.Sqrt(p)
		a[j*d+j] = root
		for i := j + 1; i < d; i++ {
			a[i*d+j] = (a[i*d+j] - dot(a[i*d:i*d+j], rj)) / root
		}
	}
	return true
}

// semidefinite writes into l the lower triangular factor of a, d x d of any rank, and uses a up.
//
// Complete pivoting stops when the largest pivot left is no larger than the rounding noise, or than the most negative one
// (Higham, the same, section 10.3); that gives a = w'w with a wide w of as many rows as the rank. Householder reflections
// make w upper triangular in the order of a, and l is its transpose.
func semidefinite(l, a []float64, d int) error {
	clear(l)
	w := l // row k is the k-th step
	rank := 0
	for ; rank < d; rank++ {
		best, least := 0, 0.0
		for i := range d {
			if a[i*d+i] > a[best*d+best] {
				best = i
			}
			least = min(least, a[i*d+i])
		}
		p := a[best*d+best]
		if p <= max(float64(d)*0x1p-52, -least) {
			break
		}
		row := w[rank*d : rank*d+d]
		for i := range d {
			row[i] = a[best*d+i] / math.Sqrt(p)
		}
		for i := range d {
			for j := range d {
				a[i*d+j] -= row[i] * row[j]
			}
		}
		for i := range d { // exactly, so that it is never chosen again
			a[best*d+i], a[i*d+best] = 0, 0
		}
	}
	for _, x := range a {
		if math.Abs(x) > indefinite {
			return wrong("matrix", x, "a semidefinite matrix: at most %g left when no pivot is, in the unit-diagonal scaling", indefinite)
		}
	}
	triangulate(w, rank, d)
	for i := range d {
		for j := range i {
			l[i*d+j], l[j*d+i] = l[j*d+i], 0
		}
	}
	return nil
}

// triangulate makes the first rows of w, each of d numbers, upper triangular with no negative diagonal, w'w unchanged.
func triangulate(w []float64, rows, d int) {
	v := make([]float64, rows)
	for k := range rows {
		norm := 0.0
		for i := k; i < rows; i++ {
			v[i] = w[i*d+k]
			norm = math.Hypot(norm, v[i])
		}
		if norm == 0 {
			continue
		}
		if v[k] > 0 {
			norm = -norm
		}
		v[k] -= norm // v = x - norm e_k
		vv := dot(v[k:], v[k:])
		for j := k; j < d; j++ {
			s := 0.0
			for i := k; i < rows; i++ {
				s += v[i] * w[i*d+j]
			}
			s *= 2 / vv
			for i := k; i < rows; i++ {
				w[i*d+j] -= s * v[i]
			}
		}
		w[k*d+k] = norm
		for i := k + 1; i < rows; i++ {
			w[i*d+k] = 0
		}
		if norm < 0 {
			for j := k; j < d; j++ {
				w[k*d+j] = -w[k*d+j]
			}
		}
	}
}

// appendFactor32 is appendFactor rounded to float32.
func appendFactor32(dst []float32, m []float64, d int) ([]float32, error) {
	l, err := appendFactor(nil, m, d)
	for _, x := range l {
		dst = append(dst, float32(x))
	}
	return dst, err
}

// expand writes L L' into m, d x d row-major.
//
// It takes O(d^3); the bounds on nodes and bytes keep the largest message that can be sent below a second.
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
