package sparse

//go:generate sh -c "cd gen && go run . -out ../kernels_amd64.s -stubs ../kernels_amd64.go -pkg sparse"

// The kernels work on column-major matrices: entry (r, c) of x lies at
// x[r+c*ld]. All sizes are multiples of three. Rows are padded in memory to a
// multiple of four behind the last row used, and kernels may write there; nothing
// ever reads those numbers back into a result.
//
// Each entry of a product is summed over k in ascending order whatever the tile
// it falls into, so that cutting a product into pieces does not change its bits.

// product sets C = [C] - A B', where C is m x n, A is m x k and B is n x k. With
// set, C counts as zero before. With lower, only the lower triangle is promised;
// the entries above within six columns of the diagonal may be overwritten.
func product(c []float64, ldc int, a []float64, lda int, b []float64, ldb int, m, n, k int, set, lower bool) {
	if m == 0 || n == 0 {
		return
	}
	if accelerated {
		productAVX2(&c[0], ldc, &a[0], lda, &b[0], ldb, m, n, k, set, lower)
		return
	}
	productGo(c, ldc, a, lda, b, ldb, m, n, k, set, lower)
}

// triangle holds a pivot block of up to six columns for solvePanel: for each
// column the inverse of its diagonal, then the entries below.
type triangle [21]float64

// solvePanel sets X = (X - A B') L^-T for the m rows of X, which are columns
// k..k+w-1 of x, where A is columns 0..k-1 of x, B is w x k and L is w x w, w is 3
// or 6.
func solvePanel(x []float64, ldx int, b []float64, ldb int, l *triangle, m, k, w int) {
	if m == 0 {
		return
	}
	if accelerated {
		solvePanelAVX2(&x[0], ldx, &b[0], ldb, &l[0], m, k, w)
		return
	}
	solvePanelGo(x, ldx, b, ldb, l, m, k, w)
}

// addRuns adds the entries of source columns 0..cols-1 to target columns, where
// run r moves rows runs[r].src.. of the source to rows runs[r].dst.. of the target.
// Column c leaves out the first skip+c*step rows of the first run; step is 0 or 1.
func addRuns(dst []float64, ldd int, src []float64, lds, cols int, runs []run, skip, step int) {
	if len(runs) == 0 {
		return
	}
	if accelerated {
		addRunsAVX2(&dst[0], ldd, &src[0], lds, cols, &runs[0].src, len(runs), skip, step)
		return
	}
	addRunsGo(dst, ldd, src, lds, cols, runs, skip, step)
}

// subtractProduct sets y = y - A x, where A is m x n.
func subtractProduct(y, a []float64, lda int, x []float64, m, n int) {
	if m == 0 || n == 0 {
		return
	}
	if accelerated {
		subtractProductAVX2(&y[0], &a[0], lda, &x[0], m, n)
		return
	}
	subtractProductGo(y, a, lda, x, m, n)
}

// subtractTransposed sets y = y - A' x, where A is m x n.
func subtractTransposed(y, a []float64, lda int, x []float64, m, n int) {
	if m == 0 || n == 0 {
		return
	}
	if accelerated {
		subtractTransposedAVX2(&y[0], &a[0], lda, &x[0], m, n)
		return
	}
	subtractTransposedGo(y, a, lda, x, m, n)
}
