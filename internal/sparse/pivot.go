package sparse

import "math"

// Panels up to this many columns are factored looking left, six columns at a
// time; wider ones in blocks, updating what lies to the right after each.
const (
	leftLooking = 96
	panelBlock  = 48
)

// factorPanel factors the pivots of a front in place: D = L L', R = R L^-T. The
// diagonal of L is stored inverted. It returns the first column whose pivot does
// not exceed its floor, or -1.
func factorPanel(d []float64, ldd int, r []float64, ldr, k, rows int, floor []float64) int {
	if k <= leftLooking {
		return factorColumns(d, ldd, r, ldr, k, k, rows, floor)
	}
	for at := 0; at < k; at += panelBlock {
		w := min(panelBlock, k-at)
		below := k - at - w
		corner := d[at+at*ldd:]
		if c := factorColumns(corner, ldd, r[at*ldr:], ldr, w, k-at, rows, floor[at:]); c >= 0 {
			return at + c
		}
		if below > 0 {
			left := corner[w:]
			product(corner[w+w*ldd:], ldd, left, ldd, left, ldd, below, below, w, false, true)
			if rows > 0 {
				product(r[(at+w)*ldr:], ldr, r[at*ldr:], ldr, left, ldd, rows, below, w, false, false)
			}
		}
	}
	return -1
}

// factorColumns factors w columns of a panel with m rows in d and rows rows in r.
func factorColumns(d []float64, ldd int, r []float64, ldr, w, m, rows int, floor []float64) int {
	var l triangle
	for j := 0; j < w; j += 6 {
		n := min(6, w-j)
		if j > 0 {
			product(d[j+j*ldd:], ldd, d[j:], ldd, d[j:], ldd, m-j, n, j, false, false)
		}
		if c := factorPivot(d[j+j*ldd:], ldd, n, floor[j:], &l); c >= 0 {
			return j + c
		}
		if below := m - j - n; below > 0 {
			solvePanel(d[j+n+j*ldd:], ldd, d, ldd, &l, below, 0, n)
		}
		if rows > 0 {
			solvePanel(r, ldr, d[j:], ldd, &l, rows, j, n)
		}
	}
	return -1
}

// factorPivot factors a pivot block of n = 3 or 6 columns and copies it to l. It
// returns the first column whose pivot does not exceed its floor, or -1.
func factorPivot(d []float64, ldd, n int, floor []float64, l *triangle) int {
	c0, c1, c2 := (*[3]float64)(d), (*[3]float64)(d[ldd:]), (*[3]float64)(d[2*ldd:])
	if c := factorThree(c0, c1, c2, (*[3]float64)(floor)); c >= 0 {
		return c
	}
	if n == 3 {
		l[0], l[1], l[2] = c0[0], c0[1], c0[2]
		l[3], l[4], l[5] = c1[1], c1[2], c2[2]
		return -1
	}
	// The rows below, and what they take from the second three columns.
	b0, b1, b2 := (*[3]float64)(d[3:]), (*[3]float64)(d[ldd+3:]), (*[3]float64)(d[2*ldd+3:])
	e0, e1, e2 := (*[3]float64)(d[3*ldd+3:]), (*[3]float64)(d[4*ldd+3:]), (*[3]float64)(d[5*ldd+3:])
	for i := range 3 {
		x := b0[i] * c0[0]
		y := (b1[i] - c0[1]*x) * c1[1]
		b0[i], b1[i] = x, y
		b2[i] = (b2[i] - c0[2]*x - c1[2]*y) * c2[2]
	}
	for i := range 3 {
		x, y, z := b0[i], b1[i], b2[i]
		e0[i] = e0[i] - x*b0[0] - y*b1[0] - z*b2[0]
		e1[i] = e1[i] - x*b0[1] - y*b1[1] - z*b2[1]
		e2[i] = e2[i] - x*b0[2] - y*b1[2] - z*b2[2]
	}
	if c := factorThree(e0, e1, e2, (*[3]float64)(floor[3:])); c >= 0 {
		return 3 + c
	}
	l[0], l[1], l[2], l[3], l[4], l[5] = c0[0], c0[1], c0[2], b0[0], b0[1], b0[2]
	l[6], l[7], l[8], l[9], l[10] = c1[1], c1[2], b1[0], b1[1], b1[2]
	l[11], l[12], l[13], l[14] = c2[2], b2[0], b2[1], b2[2]
	l[15], l[16], l[17] = e0[0], e0[1], e0[2]
	l[18], l[19], l[20] = e1[1], e1[2], e2[2]
	return -1
}

// factorThree factors three columns, with the inverse on the diagonal. It uses and
// changes the lower triangle only.
func factorThree(c0, c1, c2, floor *[3]float64) int {
	if !(c0[0] > floor[0] && c0[0] <= math.MaxFloat64) {
		return 0
	}
	inv := 1 / math.Sqrt(c0[0])
	x, y := c0[1]*inv, c0[2]*inv
	c0[0], c0[1], c0[2] = inv, x, y
	p := c1[1] - x*x
	if !(p > floor[1] && p <= math.MaxFloat64) {
		return 1
	}
	inv = 1 / math.Sqrt(p)
	z := (c1[2] - x*y) * inv
	c1[1], c1[2] = inv, z
	p = c2[2] - y*y - z*z
	if !(p > floor[2] && p <= math.MaxFloat64) {
		return 2
	}
	c2[2] = 1 / math.Sqrt(p)
	return -1
}

// solvePivots sets x = L^-1 x for the k pivots of a front.
func solvePivots(d []float64, ldd int, x []float64, k int) {
	for j := 0; j < k; j += 6 {
		n := min(6, k-j)
		for c := j; c < j+n; c++ {
			col := d[c*ldd : c*ldd+j+n]
			v := x[c] * col[c]
			x[c] = v
			for i := c + 1; i < j+n; i++ {
				x[i] -= col[i] * v
			}
		}
		if below := k - j - n; below > 0 {
			subtractProduct(x[j+n:], d[j+n+j*ldd:], ldd, x[j:], below, n)
		}
	}
}

// solvePivotsTransposed sets x = L^-T x.
func solvePivotsTransposed(d []float64, ldd int, x []float64, k int) {
	for j := (k - 1) / 6 * 6; j >= 0; j -= 6 {
		n := min(6, k-j)
		if below := k - j - n; below > 0 {
			subtractTransposed(x[j:], d[j+n+j*ldd:], ldd, x[j+n:], below, n)
		}
		for c := j + n - 1; c >= j; c-- {
			col := d[c*ldd : c*ldd+j+n]
			v := x[c]
			for i := c + 1; i < j+n; i++ {
				v -= col[i] * x[i]
			}
			x[c] = v * col[c]
		}
	}
}
