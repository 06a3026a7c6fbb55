package audit

import (
	"math"

	"selvage/internal/posegraph"
	"selvage/internal/reliability"
)

// measurement is one of the pose graph, of whatever kind. Its components are those that its kind can measure, metres before radians.
type measurement struct {
	poses  *posegraph.Between     // a relative pose, or
	sights *posegraph.Sightings   // a sighting of a mark or of a spot on a robot, or
	priors *posegraph.PointPriors // the coordinates of a control point
	k      int
}

// parts are the components of what posegraph has that count, in the plane and in space.
var (
	partsOfPose  = [2][]int{{0, 1, 5}, {0, 1, 2, 3, 4, 5}}
	partsOfPoint = [2][]int{{0, 1}, {0, 1, 2}}
	partsOfRange = []int{0}
	partsOfAngle = [2][]int{{1}, {1, 2}}
)

func (w *work) parts(m measurement) []int {
	space := w.d/3 - 1
	switch {
	case m.poses != nil:
		return partsOfPose[space]
	case m.priors != nil:
		return partsOfPoint[space]
	case m.sights.Sense() == posegraph.Range:
		return partsOfRange
	case m.sights.Sense() == posegraph.Bearing:
		return partsOfAngle[space]
	}
	return partsOfPoint[space]
}

// metres is the number of components that are lengths; angles follow.
func (w *work) metres(m measurement) int {
	switch {
	case m.poses != nil:
		return w.turns()
	case m.priors != nil || m.sights.Sense() == posegraph.Position:
		return w.turns()
	case m.sights.Sense() == posegraph.Bearing:
		return 0
	}
	return 1
}

// components are the names of the components.
func (w *work) components(m measurement) []string {
	names := []string{"x", "y", "z", "rx", "ry", "rz"}
	if m.sights != nil && m.sights.Sense() != posegraph.Position {
		names = []string{"range", "bearing", "elevation"}
	}
	var out []string
	for _, c := range w.parts(m) {
		out = append(out, names[c])
	}
	return out
}

// weight of the measurement; it may be written.
func (m measurement) weight() *float64 {
	switch {
	case m.poses != nil:
		return &m.poses.W[m.k]
	case m.sights != nil:
		return &m.sights.W[m.k]
	}
	return &m.priors.W[m.k]
}

// info returns the information matrix, without the weight.
func (w *work) info(m measurement) []float64 {
	switch {
	case m.poses != nil:
		return m.poses.Info(m.k)
	case m.sights != nil:
		return w.select3(m, m.sights.Info(m.k)[:])
	}
	return w.select3(m, m.priors.Info(m.k)[:])
}

// select3 takes the components that count from a matrix 3 x 3.
func (w *work) select3(m measurement, full []float64) []float64 {
	parts := w.parts(m)
	out := make([]float64, 0, len(parts)*len(parts))
	for _, r := range parts {
		for _, c := range parts {
			out = append(out, full[3*r+c])
		}
	}
	return out
}

// measured counts the components that were measured.
func (w *work) measured(m measurement) int {
	n := 0
	switch {
	case m.poses != nil:
		info := m.poses.Info(m.k)
		for c := range w.d {
			if info[c*(w.d+1)] > 0 {
				n++
			}
		}
		return n
	case m.sights != nil:
		return m.sights.Freedoms(m.k)
	}
	info := m.priors.Info(m.k)
	for c := range 3 {
		if info[4*c] > 0 {
			n++
		}
	}
	return n
}

// residual at the values of the graph.
func (w *work) residual(m measurement) []float64 {
	var all [6]float64
	switch v := &w.p.Graph.Values; {
	case m.poses != nil:
		all = m.poses.Residual(m.k, v)
	case m.sights != nil:
		r := m.sights.Residual(m.k, v)
		copy(all[:], r[:])
	default:
		r := m.priors.Residual(m.k, v)
		copy(all[:], r[:])
	}
	parts := w.parts(m)
	out := make([]float64, len(parts))
	for i, c := range parts {
		out[i] = all[c]
	}
	return out
}

// square returns r' Omega r, without the weight.
func (w *work) square(m measurement) float64 {
	switch v := &w.p.Graph.Values; {
	case m.poses != nil:
		return m.poses.Chi2(m.k, v)
	case m.sights != nil:
		return m.sights.Chi2(m.k, v)
	}
	r := m.priors.Residual(m.k, &w.p.Graph.Values)
	or := m.priors.Info(m.k).Apply(r)
	return r[0]*or[0] + r[1]*or[1] + r[2]*or[2]
}

// predicted returns the covariance with which the map predicts the residual of a measurement of the graph.
func (w *work) predicted(m measurement) []float64 {
	switch v := &w.p.Graph.Values; {
	case m.poses != nil:
		p := make([]float64, w.d*w.d)
		m.poses.Predicted(m.k, v, w.sigma, p)
		return p
	case m.sights != nil:
		p := m.sights.Predicted(m.k, v, w.sigma)
		return w.select3(m, p[:])
	}
	return w.select3(m, w.sigma.Of(w.p.Graph.Point(m.priors.Point(m.k))))
}

// assess computes the figures of a measurement of the graph.
func (w *work) assess(m measurement, r []float64) reliability.Figures {
	return reliability.Assess(r, w.info(m), w.predicted(m))
}

// derivative is that of the residual of a measurement by the tangents of what it depends on.
type derivative struct {
	rows int
	at   [2]int32 // variables; the second is -1 for a control point
	by   [2][]float64
}

func (w *work) derivative(m measurement) derivative {
	parts := w.parts(m)
	n := len(parts)
	v := &w.p.Graph.Values
	switch {
	case m.poses != nil:
		ji, jj := make([]float64, n*n), make([]float64, n*n)
		m.poses.Jacobians(m.k, v, ji, jj)
		return derivative{n, [2]int32{m.poses.I[m.k], m.poses.J[m.k]}, [2][]float64{ji, jj}}
	case m.priors != nil:
		one := make([]float64, 3*n)
		for i, c := range parts {
			one[3*i+c] = 1
		}
		return derivative{n, [2]int32{w.p.Graph.Point(m.priors.Point(m.k)), -1}, [2][]float64{one, nil}}
	}
	d := derivative{rows: n, at: [2]int32{m.sights.From[m.k], m.sights.To[m.k]}}
	wide := w.d
	if m.sights.OfPoints() {
		d.at[1], wide = w.p.Graph.Point(m.sights.To[m.k]), 3
	}
	ji, jj := make([]float64, 3*w.d), make([]float64, 3*wide)
	m.sights.Jacobians(m.k, v, ji, jj)
	for _, c := range parts {
		d.by[0] = append(d.by[0], ji[c*w.d:(c+1)*w.d]...)
		d.by[1] = append(d.by[1], jj[c*wide:(c+1)*wide]...)
	}
	return d
}

// scatter adds the derivative of each component times the matrix m, rows x columns, to one vector for each column.
func (d *derivative) scatter(sigma posegraph.Covariance, m []float64, columns int, vectors []float64, scalars int) {
	for e, j := range d.by {
		if j == nil {
			continue
		}
		o, width := sigma.Offset(d.at[e]), len(j)/d.rows
		if o < 0 {
			continue
		}
		for c := range columns {
			x := vectors[c*scalars+o:]
			for r := range d.rows {
				if f := m[r*columns+c]; f != 0 {
					for i := range width {
						x[i] += j[r*width+i] * f
					}
				}
			}
		}
	}
}

// spread writes J' of the components, one vector each.
func (d *derivative) spread(sigma posegraph.Covariance, vectors []float64, scalars int) {
	one := make([]float64, d.rows*d.rows)
	for i := range d.rows {
		one[i*(d.rows+1)] = 1
	}
	d.scatter(sigma, one, d.rows, vectors, scalars)
}

// gather returns J times some vectors: a row for each component, a column for each vector.
func (d *derivative) gather(sigma posegraph.Covariance, vectors []float64, scalars, columns int) []float64 {
	p := make([]float64, d.rows*columns)
	for e, j := range d.by {
		if j == nil {
			continue
		}
		o, width := sigma.Offset(d.at[e]), len(j)/d.rows
		if o < 0 {
			continue
		}
		for c := range columns {
			x := vectors[c*scalars+o:]
			for r := range d.rows {
				sum := 0.0
				for i := range width {
					sum += j[r*width+i] * x[i]
				}
				p[r*columns+c] += sum
			}
		}
	}
	return p
}

// lengths returns the translation and the rotation of a residual, metres and radians.
func (w *work) lengths(m measurement, r []float64) (metres, rad float64) {
	first := w.metres(m)
	for c, x := range r {
		if c < first {
			metres += x * x
		} else {
			rad += x * x
		}
	}
	return math.Sqrt(metres), math.Sqrt(rad)
}
