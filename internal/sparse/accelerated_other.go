//go:build !amd64

package sparse

// No kernels but the portable ones. The constant lets the compiler drop the calls
// of those declared here.
const accelerated = false

func productAVX2(c *float64, ldc int, a *float64, lda int, b *float64, ldb int, m, n, k int, set, lower bool) {
}

func solvePanelAVX2(x *float64, ldx int, b *float64, ldb int, l *float64, m, k, w int) {}

func addRunsAVX2(dst *float64, ldd int, src *float64, lds, cols int, runs *int32, count, first, step int) {
}

func subtractProductAVX2(y *float64, a *float64, lda int, x *float64, m, n int) {}

func subtractTransposedAVX2(y *float64, a *float64, lda int, x *float64, m, n int) {}
