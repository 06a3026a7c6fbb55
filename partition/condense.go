package partition

import (
	"fmt"
	"slices"

	"selvage/internal/lie"
)

// Quadratic is the second-order model 1/2 d'Hd + b'd of some measurements at the present values; d stacks the tangents of Nodes in
// order: D numbers for a pose (right perturbation), 3 for a point (what is added to it; in the plane the third is not used).
type Quadratic struct {
	Nodes []int32   // distinct, any order
	H     []float64 // row-major, square, symmetric
	B     []float64
}

// Clique is a condensed term over a few junctions, free of the frame: the reference, Nodes[0], is a pose and has no rows.
type Clique struct {
	Nodes []int32   // ascending, at least two
	H     []float64 // row-major, square: D rows for a pose and 3 for a point but for the reference
	B     []float64
}

// Condensed is a pose graph condensed onto its junctions. Together the cliques have exactly the gradient and the Gauss-Newton
// matrix that the whole graph has after the interior poses are minimised out.
type Condensed struct {
	Junctions []int32  // ascending: the separators and the poses that keep the cliques small
	Cliques   []Clique // ordered by Nodes; none lies inside another
	Bytes     int      // size of the summary by the model that chose the junctions, see [CliqueBytes] and [PoseBytes]

	dim   int           // D
	poses int           // of the graph; points come after them
	n     int           // poses and points of the graph
	terms []term        // the cliques with the rows of their references, for NullResidual
	steps []elimination // in order
}

// Sizes of a summary in bytes, the model by which junctions are chosen.
const (
	PoseBytes   = 58 // a junction: its id, its pose in float64
	PointBytes  = 26 // a junction that is a point: its id, its place in float64
	numberBytes = 4  // a number of a clique, float32
	idBytes     = 2  // a junction named in a clique
)

// CliqueBytes is the modelled size of a clique of k poses with tangents of dim numbers: the upper triangle of H, b and ids.
// A clique of one pose says nothing and takes nothing.
func CliqueBytes(dim, k int) int { return cliqueBytes(dim, k, 0) }

// Condense condenses the graph of n poses and the given terms onto junctions that include all separators. dim is D, the numbers
// of a tangent: 6 in space, 3 in the plane.
//
// Always the pose whose elimination adds least to the size of the summary is eliminated next (the lower number first when
// two are equal), to the end; then the shortest summary on that way is taken. Parts of the graph that are not connected are
// condensed independently, and each keeps at least one pose. A term over one pose is dropped: for relative measurements it
// is zero. The input is only read.
//
// An error names the term or pose at fault: wrong sizes, numbers that are not finite, a pose that its measurements leave
// undetermined.
func Condense(dim, n int, factors []Quadratic, separators []int32) (*Condensed, error) {
	return condenseAt(dim, n, nil, factors, separators)
}

// CondenseAt is [Condense] for the graph with the given poses, those at which its terms were linearised. Knowing them, it keeps all
// digits where measurements of very different strength meet, such as the odometry of a standing robot beside a drive: a
// block that elimination leaves small against what it was is taken from H N = 0 instead.
func CondenseAt(dim int, poses []lie.SE3, factors []Quadratic, separators []int32) (*Condensed, error) {
	return condenseAt(dim, len(poses), poses, factors, separators)
}

func condenseAt(dim, n int, poses []lie.SE3, factors []Quadratic, separators []int32) (*Condensed, error) {
	return layout{dim: dim, count: n, poses: poses}.condense(n, factors, separators)
}

// condense condenses a graph of n nodes.
func (at layout) condense(n int, factors []Quadratic, separators []int32) (*Condensed, error) {
	dim := at.dim
	if dim != 3 && dim != 6 {
		return nil, fmt.Errorf("partition: tangents of %d numbers, expected 3 or 6", dim)
	}
	if err := validate(at, n, factors, separators); err != nil {
		return nil, err
	}
	factors = at.pad(n, factors)
	o := newOrdering(dim, at.count, n, factors, separators)
	o.run()
	e := newEliminator(o, at, factors)
	if err := e.run(); err != nil {
		return nil, err
	}
	return e.result(), nil
}

func validate(at layout, n int, factors []Quadratic, separators []int32) error {
	if n < 1 {
		return fmt.Errorf("partition: %d poses, expected at least one", n)
	}
	seen := make([]int, n)
	for i := range factors {
		f := &factors[i]
		if len(f.Nodes) == 0 {
			return fmt.Errorf("partition: factor %d names no pose", i)
		}
		d := 0
		for _, v := range f.Nodes {
			if v < 0 || int(v) >= n {
				return fmt.Errorf("partition: factor %d names pose %d, expected 0..%d", i, v, n-1)
			}
			if seen[v] == i+1 {
				return fmt.Errorf("partition: factor %d names pose %d twice", i, v)
			}
			seen[v] = i + 1
			d += at.width(v)
		}
		if len(f.H) != d*d || len(f.B) != d {
			return fmt.Errorf("partition: factor %d on %d poses has %d numbers in H and %d in B, expected %d and %d", i, len(f.Nodes), len(f.H), len(f.B), d*d, d)
		}
		if !finite(f.H) || !finite(f.B) {
			return fmt.Errorf("partition: factor %d holds a number that is not finite", i)
		}
	}
	for _, v := range separators {
		if v < 0 || int(v) >= n {
			return fmt.Errorf("partition: separator %d, expected 0..%d", v, n-1)
		}
	}
	return nil
}

func finite(x []float64) bool {
	sum := 0.0
	for _, v := range x {
		sum += v - v // NaN for NaN and infinities, else 0
	}
	return sum == 0
}

// Interior completes a step: steps holds D numbers for each pose and for each point (of which a point uses the first three), those of
// the junctions filled in, and receives for the interior the steps that minimise the linearised graph given these.
func (c *Condensed) Interior(steps []float64) {
	if len(steps) != c.dim*c.n {
		panic("partition: length of steps")
	}
	d := c.dim
	for i := len(c.steps) - 1; i >= 0; i-- {
		s := &c.steps[i]
		var t [6]float64
		copy(t[:d], s.z)
		for k, u := range s.nodes {
			du := steps[int(u)*d:][:d]
			for r, x := range du {
				row := s.y[(k*d+r)*d:][:d]
				for j, y := range row {
					t[j] += y * x
				}
			}
		}
		dv := steps[int(s.pose)*d:][:d]
		for j := d - 1; j >= 0; j-- { // L' x = t
			x := t[j]
			for r := j + 1; r < d; r++ {
				x += s.l[r*d+j] * dv[r] // dv = -x
			}
			dv[j] = -x * s.l[j*d+j] // the diagonal holds inverses
		}
	}
}

// NullResidual returns the largest |H N| / |H| (largest entries) over the cliques, N the tangents that a common motion of the
// poses has, |H| that of the clique or of what was condensed into it; poses are those at which the graph was linearised, all n
// of them. It is zero but for rounding, below 1e-9, when every term is relative and belongs to these poses: a check that
// costs next to nothing.
func (c *Condensed) NullResidual(poses []lie.SE3) float64 { return c.NullResidualWith(poses, nil) }

// NullResidualWith is [Condensed.NullResidual] for a graph with points.
func (c *Condensed) NullResidualWith(poses []lie.SE3, points [][3]float64) float64 {
	if len(poses) != c.poses || len(points) != c.n-c.poses {
		panic("partition: number of poses or points")
	}
	at := layout{dim: c.dim, count: len(poses), poses: poses, points: points}
	worst := 0.0
	for i := range c.terms {
		worst = max(worst, c.terms[i].nullResidual(&at))
	}
	return worst
}

func (t *term) nullResidual(at *layout) float64 {
	// N is taken relative to the first pose: the same space, without levers to a far origin.
	d := at.dim
	m := d * len(t.nodes)
	N := make([]float64, m*d)
	for k, v := range t.nodes {
		at.motion(v, t.nodes[0], N[k*d*d:][:d*d])
	}
	product, largest := 0.0, t.scale
	for i := 0; i < m; i++ {
		var row [6]float64
		for j := 0; j < m; j++ {
			h := t.at(d, i, j)
			largest = max(largest, abs(h))
			for c := 0; c < d; c++ {
				row[c] += h * N[j*d+c]
			}
		}
		for _, x := range row[:d] {
			product = max(product, abs(x))
		}
	}
	if largest == 0 {
		return 0
	}
	return product / largest
}

func abs(x float64) float64 {
	if x < 0 {
		return -x
	}
	return x
}

// result collects what remains after the elimination.
func (e *eliminator) result() *Condensed {
	c := &Condensed{dim: e.d, poses: e.layout.count, n: len(e.pos), steps: e.steps}
	gone := make([]bool, c.n)
	for i := range e.steps {
		gone[e.steps[i].pose] = true
	}
	for v := range gone {
		if !gone[v] {
			c.Junctions = append(c.Junctions, int32(v))
		}
	}
	for i := range e.terms {
		if e.terms[i].h != nil {
			e.own(int32(i))
			c.terms = append(c.terms, e.terms[i])
		}
	}
	slices.SortFunc(c.terms, func(a, b term) int { return slices.Compare(a.nodes, b.nodes) })
	for _, v := range c.Junctions {
		c.Bytes += e.plan.nodeBytes(v)
	}
	for i := range c.terms {
		t := &c.terms[i]
		c.Cliques = append(c.Cliques, e.layout.strip(t.clique(e.d)))
		c.Bytes += e.plan.bytes(t.nodes)
	}
	return c
}

// clique returns the term without the rows and columns of its first pose, both triangles filled.
func (t *term) clique(dim int) Clique {
	d := dim * (len(t.nodes) - 1)
	c := Clique{Nodes: slices.Clone(t.nodes), H: make([]float64, d*d), B: slices.Clone(t.b[dim:])}
	for i := 0; i < d; i++ {
		for j := 0; j <= i; j++ {
			h := t.at(dim, dim+i, dim+j)
			c.H[i*d+j], c.H[j*d+i] = h, h
		}
	}
	return c
}
