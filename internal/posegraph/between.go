package posegraph

import (
	"slices"

	"selvage/internal/lie"
)

// Between is a batch of relative-pose factors: Z is the measured pose of J seen from I.
type Between struct {
	dim   int
	I, J  []int32
	Z     []lie.SE3
	info  []float64 // dim x dim each, symmetric, row-major
	W     []float64 // weight of each factor, 1 unless a robust method changed it
	slots []Slot
}

// AddBetween appends an empty batch of relative poses to g and returns it.
func (g *Graph) AddBetween() *Between {
	b := &Between{dim: g.Dim}
	g.Sets = append(g.Sets, b)
	return b
}

// Grow makes room for n more factors.
func (b *Between) Grow(n int) {
	b.I, b.J, b.Z, b.W = slices.Grow(b.I, n), slices.Grow(b.J, n), slices.Grow(b.Z, n), slices.Grow(b.W, n)
	b.info = slices.Grow(b.info, n*b.dim*b.dim)
}

// Add appends a measurement z of pose j seen from pose i with its information matrix, 6 x 6 row-major in the order of the
// tangent; in the plane only the entries of x, y, rz are used.
func (b *Between) Add(i, j int32, z lie.SE3, info *[36]float64) {
	b.I, b.J, b.Z, b.W = append(b.I, i), append(b.J, j), append(b.Z, z), append(b.W, 1)
	if b.dim == 6 {
		b.info = append(b.info, info[:]...)
		return
	}
	for _, r := range planar {
		for _, c := range planar {
			b.info = append(b.info, info[6*r+c])
		}
	}
}

// planar are the components of a tangent that a planar survey has.
var planar = [3]int{0, 1, 5}

// Len returns the number of factors.
func (b *Between) Len() int { return len(b.I) }

// Info returns the information matrix of factor k, dim x dim row-major; it may be written.
func (b *Between) Info(k int) []float64 {
	d := b.dim * b.dim
	return b.info[k*d : (k+1)*d : (k+1)*d]
}

// Residual returns Log(Z^-1 X_i^-1 X_j) of factor k.
func (b *Between) Residual(k int, v *Values) lie.Tangent {
	p := v.Poses[b.I[k]].Between(v.Poses[b.J[k]])
	e := b.Z[k].Between(p)
	return e.Log()
}

// Chi2 returns r' Omega r of factor k, without its weight.
func (b *Between) Chi2(k int, v *Values) float64 {
	r := b.Residual(k, v)
	return quadraticForm(b.dim, b.Info(k), &r)
}

func quadraticForm(dim int, m []float64, r *lie.Tangent) float64 {
	sum := 0.0
	if dim == 3 {
		for i, a := range planar {
			for j, c := range planar {
				sum += r[a] * m[3*i+j] * r[c]
			}
		}
		return sum
	}
	for i := 0; i < 6; i++ {
		row := 0.0
		for j := 0; j < 6; j++ {
			row += m[6*i+j] * r[j]
		}
		sum += r[i] * row
	}
	return sum
}

// Couplings implements [FactorSet].
func (b *Between) Couplings(emit func(i, j int32)) {
	for k := range b.I {
		emit(b.I[k], b.J[k])
	}
}

// Bind implements [FactorSet].
func (b *Between) Bind(next func() Slot) {
	b.slots = make([]Slot, len(b.I))
	for k := range b.slots {
		b.slots[k] = next()
	}
}

// Cost implements [FactorSet].
func (b *Between) Cost(v *Values) float64 {
	sum := 0.0
	for k := range b.I {
		if b.W[k] != 0 {
			sum += b.W[k] * b.Chi2(k, v)
		}
	}
	return sum / 2
}

// Linearise implements [FactorSet].
func (b *Between) Linearise(v *Values, a *Assembly) float64 {
	if b.dim == 3 {
		return b.linearisePlane(v, a)
	}
	return b.lineariseSpace(v, a)
}

// Quadratic writes the second-order model of factor k at v to h (2 dim x 2 dim, row-major) and b (2 dim), over the tangents of
// pose I, then of pose J; what stood there is overwritten.
func (b *Between) Quadratic(k int, v *Values, h, g []float64) {
	d := b.dim
	xi, xj := &v.Poses[b.I[k]], &v.Poses[b.J[k]]
	if d == 3 {
		var p planeFactor
		p.evaluate(xi, xj, &b.Z[k], (*[9]float64)(b.Info(k)), b.W[k])
		for r := 0; r < 3; r++ {
			for c := 0; c < 3; c++ {
				h[6*r+c] = p.hii[3*r+c]
				h[6*r+3+c] = p.hji[3*c+r]
				h[6*(3+r)+c] = p.hji[3*r+c]
				h[6*(3+r)+3+c] = p.hjj[3*r+c]
			}
		}
		copy(g, p.gi[:])
		copy(g[3:], p.gj[:])
		return
	}
	var p spaceFactor
	p.evaluate(xi, xj, &b.Z[k], (*[36]float64)(b.Info(k)), b.W[k])
	put := func(row, col int, m *lie.Mat3, transposed bool) {
		for r := 0; r < 3; r++ {
			for c := 0; c < 3; c++ {
				if transposed {
					h[12*(row+r)+col+c] = m[3*c+r]
				} else {
					h[12*(row+r)+col+c] = m[3*r+c]
				}
			}
		}
	}
	for i, m := range [2]*[3]lie.Mat3{&p.hii, &p.hjj} {
		o := 6 * i
		put(o, o, &m[0], false)
		put(o, o+3, &m[1], false)
		put(o+3, o, &m[1], true)
		put(o+3, o+3, &m[2], false)
	}
	for q := range p.hji {
		r, c := 3*(q/2), 3*(q%2)
		put(6+r, c, &p.hji[q], false)
		put(c, 6+r, &p.hji[q], true)
	}
	copy(g, p.gi[:])
	copy(g[6:], p.gj[:])
}
