package sparse

// The kernels in plain Go. Unlike the others they write exact rows only.

func productGo(c []float64, ldc int, a []float64, lda int, b []float64, ldb int, m, n, k int, set, lower bool) {
	for j := 0; j < n; j += 3 {
		first := 0
		if lower {
			first = j
		}
		for i := first; i < m; i += 3 {
			tileGo(c[i+j*ldc:], ldc, a[i:], lda, b[j:], ldb, k, set)
		}
	}
}

// tileGo is a 3 x 3 tile of product.
func tileGo(c []float64, ldc int, a []float64, lda int, b []float64, ldb int, k int, set bool) {
	c0, c1, c2 := (*[3]float64)(c), (*[3]float64)(c[ldc:]), (*[3]float64)(c[2*ldc:])
	var s00, s10, s20, s01, s11, s21, s02, s12, s22 float64
	if !set {
		s00, s10, s20 = c0[0], c0[1], c0[2]
		s01, s11, s21 = c1[0], c1[1], c1[2]
		s02, s12, s22 = c2[0], c2[1], c2[2]
	}
	for l := range k {
		x, y := (*[3]float64)(a[l*lda:]), (*[3]float64)(b[l*ldb:])
		x0, x1, x2 := x[0], x[1], x[2]
		y0, y1, y2 := y[0], y[1], y[2]
		s00 -= x0 * y0
		s10 -= x1 * y0
		s20 -= x2 * y0
		s01 -= x0 * y1
		s11 -= x1 * y1
		s21 -= x2 * y1
		s02 -= x0 * y2
		s12 -= x1 * y2
		s22 -= x2 * y2
	}
	c0[0], c0[1], c0[2] = s00, s10, s20
	c1[0], c1[1], c1[2] = s01, s11, s21
	c2[0], c2[1], c2[2] = s02, s12, s22
}

func solvePanelGo(x []float64, ldx int, b []float64, ldb int, l *triangle, m, k, w int) {
	if k > 0 {
		productGo(x[k*ldx:], ldx, x, ldx, b, ldb, m, w, k, false, false)
	}
	t := 0
	for c := range w {
		col := x[(k+c)*ldx:][:m]
		inv := l[t]
		for i := range col {
			col[i] *= inv
		}
		for o := 1; c+o < w; o++ {
			v := l[t+o]
			target := x[(k+c+o)*ldx:][:m]
			for i, y := range col {
				target[i] -= v * y
			}
		}
		t += w - c
	}
}

func addRunsGo(dst []float64, ldd int, src []float64, lds, cols int, runs []run, skip, step int) {
	for c := range cols {
		to, from := dst[c*ldd:], src[c*lds:]
		left := int32(skip + c*step)
		for _, r := range runs {
			f := from[r.src+left : r.src+r.length]
			t := to[r.dst+left:][:len(f)]
			for i, v := range f {
				t[i] += v
			}
			left = 0
		}
	}
}

func subtractProductGo(y, a []float64, lda int, x []float64, m, n int) {
	y = y[:m]
	for c := 0; c < n; c += 3 {
		a0, a1, a2 := a[c*lda:][:m], a[(c+1)*lda:][:m], a[(c+2)*lda:][:m]
		x0, x1, x2 := x[c], x[c+1], x[c+2]
		for i := range y {
			y[i] = y[i] - a0[i]*x0 - a1[i]*x1 - a2[i]*x2
		}
	}
}

func subtractTransposedGo(y, a []float64, lda int, x []float64, m, n int) {
	x = x[:m]
	for c := 0; c < n; c += 3 {
		a0, a1, a2 := a[c*lda:][:m], a[(c+1)*lda:][:m], a[(c+2)*lda:][:m]
		var s0, s1, s2 float64
		for i, v := range x {
			s0 += a0[i] * v
			s1 += a1[i] * v
			s2 += a2[i] * v
		}
		y[c] -= s0
		y[c+1] -= s1
		y[c+2] -= s2
	}
}
