package partition

import (
	"math"

	"selvage/internal/lie"
)

// CondensePoints is [CondenseAt] for a graph with points, such as marks, which are numbered after the poses. A clique always keeps a
// pose for its reference, so the last pose beside points stays, and a point that is no separator is eliminated like any other.
// Absolute knowledge of a point is a term over one node and is dropped.
func CondensePoints(dim int, poses []lie.SE3, points [][3]float64, factors []Quadratic, separators []int32) (*Condensed, error) {
	at := layout{dim: dim, count: len(poses), poses: poses, points: points}
	return at.condense(len(poses)+len(points), factors, separators)
}

// layout tells poses from points. During elimination a point takes D numbers like a pose: those that it does not have, the height in
// the plane and three in space, stand alone with a pivot of their own.
type layout struct {
	dim    int
	count  int       // poses; nodes from here on are points
	poses  []lie.SE3 // nil when not known
	points [][3]float64
}

func (l *layout) known() bool { return l.poses != nil }

// width returns the numbers of a node's tangent.
func (l *layout) width(v int32) int {
	if int(v) < l.count {
		return l.dim
	}
	return 3
}

// never is a cost above all others.
const never = math.MaxInt / 4

// cliqueBytes is [CliqueBytes] with points.
func cliqueBytes(dim, poses, points int) int {
	if poses+points < 2 {
		return 0
	}
	d := dim*(poses-1) + 3*points
	return numberBytes*(d*(d+1)/2+d) + idBytes*(poses+points)
}

// bytes returns the size of a term over a set, ascending.
func (o *ordering) bytes(set []int32) int {
	points := 0
	for points < len(set) && set[len(set)-1-points] >= o.poses {
		points++
	}
	return cliqueBytes(o.dim, len(set)-points, points)
}

// nodeBytes returns the size of a junction.
func (o *ordering) nodeBytes(v int32) int {
	if v < o.poses {
		return PoseBytes
	}
	return PointBytes
}

// used returns how many numbers a point really has: two in the plane.
func (l *layout) used() int {
	if l.dim == 3 {
		return 2
	}
	return 3
}

// pad gives the points of all terms D numbers.
func (l *layout) pad(n int, factors []Quadratic) []Quadratic {
	if n == l.count {
		return factors
	}
	out := make([]Quadratic, len(factors))
	for i := range factors {
		out[i] = l.padded(&factors[i])
	}
	return out
}

func (l *layout) padded(f *Quadratic) Quadratic {
	points := 0
	for _, v := range f.Nodes {
		if int(v) >= l.count {
			points++
		}
	}
	if points == 0 {
		return *f
	}
	d := l.dim
	m, narrow := d*len(f.Nodes), len(f.B)
	q := Quadratic{Nodes: f.Nodes, H: make([]float64, m*m), B: make([]float64, m)}
	var to []int32 // row of f -> row of q, -1 for the height in the plane
	for k, v := range f.Nodes {
		for c := range l.width(v) {
			row := int32(k*d + c)
			if int(v) >= l.count && c >= l.used() {
				row = -1
			}
			to = append(to, row)
		}
		if int(v) >= l.count {
			for c := l.used(); c < d; c++ {
				q.H[(k*d+c)*(m+1)] = 1
			}
		}
	}
	for r := range narrow {
		if to[r] < 0 {
			continue
		}
		q.B[to[r]] = f.B[r]
		for c := range narrow {
			if to[c] >= 0 {
				q.H[int(to[r])*m+int(to[c])] = f.H[r*narrow+c]
			}
		}
	}
	return q
}

// strip takes from a clique what pad added.
func (l *layout) strip(c Clique) Clique {
	if int(c.Nodes[len(c.Nodes)-1]) < l.count {
		return c
	}
	d := l.dim
	m, narrow := len(c.B), 0
	var from []int32 // row -> row of c, -1 for the height in the plane
	for k, v := range c.Nodes[1:] {
		for i := range l.width(v) {
			row := int32(k*d + i)
			if int(v) >= l.count && i >= l.used() {
				row = -1
			}
			from = append(from, row)
			narrow++
		}
	}
	q := Clique{Nodes: c.Nodes, H: make([]float64, narrow*narrow), B: make([]float64, narrow)}
	for r, a := range from {
		if a < 0 {
			continue
		}
		q.B[r] = c.B[a]
		for s, b := range from {
			if b >= 0 {
				q.H[r*narrow+s] = c.H[int(a)*m+int(b)]
			}
		}
	}
	return q
}

// motion writes, D x D, the tangent at node v of a common motion given by its tangent at the pose ref: Ad(X_v^-1 X_ref) for a pose,
// R_ref [I, -skew(R_ref'(p - t_ref))] for a point.
func (l *layout) motion(v, ref int32, out []float64) {
	d := l.dim
	y := &l.poses[ref]
	if int(v) < l.count {
		z := l.poses[v].Between(*y)
		if d == 6 {
			a := z.Adjoint()
			copy(out, a[:])
		} else {
			a := lie.Planar(&z).Adjoint()
			copy(out, a[:])
		}
		return
	}
	clear(out)
	turn := y.R.Mul(lie.Skew(y.Inv().Apply(l.points[int(v)-l.count])))
	for r := range l.used() {
		if d == 3 {
			out[3*r], out[3*r+1], out[3*r+2] = y.R[3*r], y.R[3*r+1], -turn[3*r+2]
			continue
		}
		for c := range 3 {
			out[6*r+c], out[6*r+3+c] = y.R[3*r+c], -turn[3*r+c]
		}
	}
}

// mendPoint is mend for the point at position k: H N = 0 for the translations alone, whose tangents are R_j' at a pose and I at a point,
// gives H_kk = -sum_j H_kj N_j.
func (e *eliminator) mendPoint(sum *term, k int) {
	d, used := e.d, e.used()
	m := d * len(sum.nodes)
	var block lie.Mat3
	for j, w := range sum.nodes {
		if j == k {
			continue
		}
		n := lie.Identity().R
		if int(w) < e.count {
			n = e.poses[w].R.T()
		}
		for r := range used {
			for s := range used {
				h := sum.at(d, k*d+r, j*d+s)
				for c := range used {
					block[3*r+c] -= h * n[3*s+c]
				}
			}
		}
	}
	for r := range used {
		for c := range used {
			sum.h[(k*d+r)*m+k*d+c] = (block[3*r+c] + block[3*c+r]) / 2
		}
	}
}
