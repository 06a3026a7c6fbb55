package partition

import "math"

// The dense steps of an elimination. D is 3 or 6; matrices are row-major and symmetric ones live in their lower triangle of D x D
// blocks.

// add adds src to dst, as long as src.
func add(dst, src []float64) {
	for i, v := range src {
		dst[i] += v
	}
}

// addBlock adds a D x D block.
func addBlock(d int, dst []float64, stride int, src []float64, srcStride int) {
	if d == 6 {
		for i := 0; i < 6; i++ {
			x, y := (*[6]float64)(dst[i*stride:]), (*[6]float64)(src[i*srcStride:])
			x[0] += y[0]
			x[1] += y[1]
			x[2] += y[2]
			x[3] += y[3]
			x[4] += y[4]
			x[5] += y[5]
		}
		return
	}
	for i := 0; i < 3; i++ {
		x, y := (*[3]float64)(dst[i*stride:]), (*[3]float64)(src[i*srcStride:])
		x[0] += y[0]
		x[1] += y[1]
		x[2] += y[2]
	}
}

func addTransposed(d int, dst []float64, stride int, src []float64, srcStride int) {
	for i := 0; i < d; i++ {
		for j, v := range src[i*srcStride:][:d] {
			dst[j*stride+i] += v
		}
	}
}

// factorPivot replaces the symmetric D x D matrix by its Cholesky factor (lower triangle, diagonal inverted). It reports false
// when a pivot vanishes against its diagonal, that is, when the matrix is singular to working precision.
func factorPivot(d int, a []float64) bool {
	for j := 0; j < d; j++ {
		row := a[j*d:][:d]
		full := row[j]
		p := full
		for _, v := range row[:j] {
			p -= v * v
		}
		if !(p > 1e-14*full) || math.IsInf(p, 0) {
			return false
		}
		inv := 1 / math.Sqrt(p)
		row[j] = inv
		for i := j + 1; i < d; i++ {
			below := a[i*d:][:d]
			v := below[j]
			for k, x := range row[:j] {
				v -= x * below[k]
			}
			below[j] = v * inv
		}
	}
	return true
}

// solveRows replaces each row y of rows by y L^-T, that is, by (L^-1 y')'.
func solveRows(d int, l, rows []float64) {
	for ; len(rows) > 0; rows = rows[d:] {
		y := rows[:d]
		for j := range y {
			lj := l[j*d:][:d]
			v := y[j]
			for k, x := range y[:j] {
				v -= x * lj[k]
			}
			y[j] = v * lj[j]
		}
	}
}

// subtractOuter subtracts Y Y' from the lower triangle of blocks of h, k poses wide; Y has D columns. Rows are taken two or three
// at a time, as many as share a column range, so that each number of Y is loaded less often.
func subtractOuter(d, k int, h, y []float64) {
	m := d * k
	if d == 6 {
		for i := 0; i < m; i += 2 {
			w := (i/6 + 1) * 6
			r, s := h[i*m:][:w], h[(i+1)*m:][:w]
			a, b := (*[6]float64)(y[6*i:]), (*[6]float64)(y[6*i+6:])
			for j := range r {
				c := (*[6]float64)(y[6*j:])
				r[j] -= a[0]*c[0] + a[1]*c[1] + a[2]*c[2] + a[3]*c[3] + a[4]*c[4] + a[5]*c[5]
				s[j] -= b[0]*c[0] + b[1]*c[1] + b[2]*c[2] + b[3]*c[3] + b[4]*c[4] + b[5]*c[5]
			}
		}
		return
	}
	for i := 0; i < m; i += 3 {
		w := i + 3
		r, s, t := h[i*m:][:w], h[(i+1)*m:][:w], h[(i+2)*m:][:w]
		p, q, o := (*[3]float64)(y[3*i:]), (*[3]float64)(y[3*i+3:]), (*[3]float64)(y[3*i+6:])
		for j := range r {
			c := (*[3]float64)(y[3*j:])
			r[j] -= p[0]*c[0] + p[1]*c[1] + p[2]*c[2]
			s[j] -= q[0]*c[0] + q[1]*c[1] + q[2]*c[2]
			t[j] -= o[0]*c[0] + o[1]*c[1] + o[2]*c[2]
		}
	}
}
