package sparse

// Matrix holds the values of a symmetric block matrix with the pattern of its
// Symbolic.
type Matrix struct {
	s    *Symbolic
	data []float64
}

// NewMatrix returns a matrix of zeros.
func (s *Symbolic) NewMatrix() *Matrix {
	return &Matrix{s: s, data: make([]float64, s.matrixLen)}
}

// Zero sets all values to zero.
func (m *Matrix) Zero() { clear(m.data) }

// Diag returns diagonal block i, d x d row-major with d = Dims[i]. The caller
// writes both triangles.
func (m *Matrix) Diag(i int) []float64 {
	a, b := m.s.diagAt[i], m.s.diagAt[i+1]
	return m.data[a:b:b]
}

// Off returns the block in row Pairs[k][0] and column Pairs[k][1], row-major. Its
// transpose is implied.
func (m *Matrix) Off(k int) []float64 {
	a, b := m.s.offAt[k], m.s.offAt[k+1]
	return m.data[a:b:b]
}

// Mul sets y = H x. The vectors must not overlap.
func (m *Matrix) Mul(x, y []float64) {
	s := m.s
	for i := range s.dims {
		a, b := s.offset[i], s.offset[i+1]
		mulBlock(m.Diag(i), x[a:b], y[a:b], false)
	}
	for k, q := range s.pairs {
		h := m.Off(k)
		i, j := q[0], q[1]
		xi, yi := x[s.offset[i]:s.offset[i+1]], y[s.offset[i]:s.offset[i+1]]
		xj, yj := x[s.offset[j]:s.offset[j+1]], y[s.offset[j]:s.offset[j+1]]
		mulBlock(h, xj, yi, true)
		for r, v := range xi {
			for c, w := range h[r*len(xj) : (r+1)*len(xj)] {
				yj[c] += w * v
			}
		}
	}
}

// mulBlock sets y = A x, or adds it.
func mulBlock(a, x, y []float64, add bool) {
	for r := range y {
		sum := 0.0
		if add {
			sum = y[r]
		}
		for c, v := range a[r*len(x) : (r+1)*len(x)] {
			sum += v * x[c]
		}
		y[r] = sum
	}
}
