package sparse

import "math"

// Panels up to this many columns are factored looking left, six columns at a
// time; wider ones in blocks, updating what lies to the right after each.
const (
	leftLooking = 96
	panelBlock  = 48
)

// factorPanel factors the pivots of a front in place: D = L L', R = R L^-T. The
// diagonal of L is stored inverted. It returns the first column whose pivot is
// not positive, or -1.
func factorPanel(d []float64, ldd int, r []float64, ldr, k, rows int) int {
	if k <= leftLooking {
		return factorColumns(d, ldd, r, ldr, k, k, rows)
	}
	for at := 0; at < k; at += panelBlock {
		w := min(panelBlock, k-at)
		below := k - at - w
		corner := d[at+at*ldd:]
		if c := factorColumns(corner, ldd, r[at*ldr:], ldr, w, k-at, rows); c >= 0 {
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
func factorColumns(d []float64, ldd int, r []float64, ldr, w, m, rows int) int {
	var l triangle
	for j := 0; j < w; j += 6 {
		n := min(6, w-j)
		if j > 0 {
			product(d[j+j*ldd:], ldd, d[j:], ldd, d[j:], ldd, m-j, n, j, false, false)
		}
		if c := factorPivot(d[j+j*ldd:], ldd, n, &l); c >= 0 {
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

// factorPivot factors an n x n pivot block, n at most 6, and copies it to l.
func factorPivot(d []float64, ldd, n int, l *triangle) int {
	t := 0
	for j := range n {
		col := d[j*ldd : j*ldd+n]
		v := col[j]
		if !(v > 0 && v <= math.MaxFloat64) {
			return j
		}
		inv := 1 / math.Sqrt(v)
		col[j] = inv
		l[t] = inv
		for i := j + 1; i < n; i++ {
			col[i] *= inv
			l[t+i-j] = col[i]
		}
		for c := j + 1; c < n; c++ {
			x := col[c]
			to := d[c*ldd : c*ldd+n]
			for i := c; i < n; i++ {
				to[i] -= col[i] * x
			}
		}
		t += n - j
	}
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
