package partition

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"pgregory.net/rapid"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
)

// marked is a graph of one robot: a walk with closures and marks, off its optimum.
type marked struct {
	g        *posegraph.Graph
	links    *posegraph.Between
	sights   *posegraph.Sightings
	n, marks int
}

func walkAmongMarks(dim, n, marks int, rng *rand.Rand) marked {
	tangent := func(m, rad float64) (t lie.Tangent) {
		for i := range t {
			t[i] = m * rng.NormFloat64()
			if i > 2 {
				t[i] = rad * rng.NormFloat64()
			}
		}
		if dim == 3 {
			t[2], t[3], t[4] = 0, 0, 0
		}
		return t
	}
	poses := []lie.SE3{lie.Exp(tangent(5, 1))}
	for k := 1; k < n; k++ {
		poses = append(poses, poses[k-1].Plus(tangent(1, 0.3)))
	}
	m := marked{g: posegraph.New(dim, poses), n: n, marks: marks}
	for range marks {
		t := tangent(5, 0)
		m.g.Values.Points = append(m.g.Values.Points, [3]float64{t[0], t[1], t[2]})
	}
	info := func() (o [36]float64) {
		for i := range 6 {
			o[7*i] = 1 + 10*rng.Float64()
		}
		return o
	}
	m.links, m.sights = m.g.AddBetween(), m.g.AddSightings(posegraph.RangeBearing)
	link := func(i, j int) {
		o := info()
		m.links.Add(int32(i), int32(j), poses[i].Between(poses[j]).Plus(tangent(0.05, 0.02)), &o)
	}
	for k := 1; k < n; k++ {
		link(k-1, k)
		if i := rng.IntN(k); rng.Float64() < 0.2 && i < k-1 {
			link(i, k)
		}
	}
	for k := range 3 * marks {
		p, i := k%marks, rng.IntN(n)
		q := poses[i].Inv().Apply(m.g.Values.Points[p])
		flat := math.Hypot(q[0], q[1])
		z := [3]float64{math.Hypot(flat, q[2]) + 0.05*rng.NormFloat64(), math.Atan2(q[1], q[0]) + 0.02*rng.NormFloat64(), math.Atan2(q[2], flat)}
		m.sights.Add(int32(i), int32(p), lie.Identity(), [3]float64{}, z, &lie.Mat3{100, 0, 0, 0, 400, 0, 0, 0, 400})
	}
	return m
}

func (m *marked) terms() (out []Quadratic) {
	d := m.g.Dim
	for k := range m.links.Len() {
		q := Quadratic{Nodes: []int32{m.links.I[k], m.links.J[k]}, H: make([]float64, 4*d*d), B: make([]float64, 2*d)}
		m.links.Quadratic(k, &m.g.Values, q.H, q.B)
		out = append(out, q)
	}
	for k := range m.sights.Len() {
		q := Quadratic{Nodes: []int32{m.sights.From[k], m.g.Point(m.sights.To[k])}, H: make([]float64, (d+3)*(d+3)), B: make([]float64, d+3)}
		m.sights.Quadratic(k, &m.g.Values, q.H, q.B)
		out = append(out, q)
	}
	return out
}

// One Gauss-Newton step of the junctions by the condensed factors is that of the whole graph, with the same covariance, and Interior
// gives the rest of it; the condensed graph stands in another frame.
func TestCondensingWithPointsIsExact(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		dim := 3 * rapid.IntRange(1, 2).Draw(t, "dim")
		n, marks := rapid.IntRange(2, 25).Draw(t, "poses"), rapid.IntRange(1, 6).Draw(t, "marks")
		rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "seed"), 0))
		m := walkAmongMarks(dim, n, marks, rng)
		separators := []int32{int32(rng.IntN(n))}
		for v := range int32(n + marks) {
			if rng.Float64() < 0.2 {
				separators = append(separators, v)
			}
		}
		c, err := CondensePoints(dim, m.g.Values.Poses, m.g.Values.Points, m.terms(), separators)
		if err != nil {
			t.Fatal(err)
		}
		if e := c.NullResidualWith(m.g.Values.Poses, m.g.Values.Points); !(e < 1e-11) {
			t.Fatalf("H N = %.2g |H|", e)
		}
		for _, v := range separators {
			if !slices.Contains(c.Junctions, v) {
				t.Fatalf("separator %d is gone", v)
			}
		}
		move := lie.Exp(lie.Tangent{0: 3, 1: -2, 5: 1})
		move.T[2] = 0
		small := posegraph.New(dim, nil)
		number := make([]int32, n+marks)
		for _, v := range c.Junctions {
			if int(v) < n {
				number[v] = int32(len(small.Values.Poses))
				small.Values.Poses = append(small.Values.Poses, move.Mul(m.g.Values.Poses[v]))
			} else {
				number[v] = int32(len(small.Values.Points))
				small.Values.Points = append(small.Values.Points, move.Apply(m.g.Values.Points[int(v)-n]))
			}
		}
		set := small.AddMarkCliques()
		for _, q := range c.Cliques {
			var poses, points []int32
			var at []lie.SE3
			var places [][3]float64
			for _, v := range q.Nodes {
				if int(v) < n {
					poses, at = append(poses, number[v]), append(at, m.g.Values.Poses[v])
				} else {
					points, places = append(points, number[v]), append(places, m.g.Values.Points[int(v)-n])
				}
			}
			set.Add(poses, at, points, places, q.H, q.B)
		}
		fixed := c.Junctions[0] // a pose
		whole, err := posegraph.NewSolver(m.g, []int32{fixed}, sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		part, err := posegraph.NewSolver(small, []int32{number[fixed]}, sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		inSmall := func(v int32) int32 {
			if int(v) < n {
				return number[v]
			}
			return small.Point(number[v])
		}
		// Covariances: poses in their own tangents, points turned by the motion.
		scale := 0.0
		var mine, other []int32
		for _, v := range c.Junctions {
			if int(v) < n {
				mine, other = append(mine, v), append(other, inSmall(v))
			}
		}
		a, err := whole.Joint(mine)
		if err != nil {
			t.Fatal(err)
		}
		b, err := part.Joint(other)
		if err != nil {
			t.Fatal(err)
		}
		for i := range a {
			scale = max(scale, math.Abs(a[i]))
		}
		for i := range a {
			if math.Abs(a[i]-b[i]) > 1e-9*(1+scale) {
				t.Fatalf("covariance %d of the junctions: %g, from the whole graph %g", i, b[i], a[i])
			}
		}
		before := slices.Clone(m.g.Values.Poses)
		beforePoints := slices.Clone(m.g.Values.Points)
		whole.Step(math.Inf(1))
		part.Step(math.Inf(1))
		// The datum of the small graph: its fixed pose.
		for _, v := range c.Junctions {
			if int(v) < n {
				want := move.Mul(m.g.Values.Poses[v])
				d := want.Between(small.Values.Poses[number[v]])
				if e := d.Log(); largest(e[:]) > 1e-8 {
					t.Fatalf("pose %d steps elsewhere by %v", v, e)
				}
				continue
			}
			want := move.Apply(m.g.Values.Points[int(v)-n])
			got := small.Values.Points[number[v]]
			for i := range want {
				if math.Abs(want[i]-got[i]) > 1e-8 {
					t.Fatalf("point %d steps to %v, want %v", v, got, want)
				}
			}
		}
		steps := make([]float64, dim*(n+marks))
		fill := func(v int, into []float64) {
			if v >= n {
				for i := range 3 {
					into[i] = m.g.Values.Points[v-n][i] - beforePoints[v-n][i]
				}
				return
			}
			d := before[v].Between(m.g.Values.Poses[v])
			e := d.Log()
			if dim == 3 {
				into[0], into[1], into[2] = e[0], e[1], e[5]
			} else {
				copy(into, e[:])
			}
		}
		for _, v := range c.Junctions {
			fill(int(v), steps[int(v)*dim:])
		}
		c.Interior(steps)
		want := make([]float64, 6)
		for v := range n + marks {
			clear(want)
			fill(v, want)
			for i := range 3 {
				if got := steps[v*dim+i]; math.Abs(got-want[i]) > 1e-7 {
					t.Fatalf("node %d of %d poses: interior step %v, want %v", v, n, steps[v*dim:][:dim], want)
				}
			}
		}
	})
}

// Marks that one robot sees alone all go, in the end with all poses but one.
func TestPrivateMarksGo(t *testing.T) {
	for _, dim := range []int{3, 6} {
		m := walkAmongMarks(dim, 40, 8, rand.New(rand.NewPCG(3, 3)))
		c, err := CondensePoints(dim, m.g.Values.Poses, m.g.Values.Points, m.terms(), []int32{17})
		if err != nil {
			t.Fatal(err)
		}
		if !slices.Equal(c.Junctions, []int32{17}) || c.Bytes != PoseBytes {
			t.Errorf("junctions %v, %d bytes; want pose 17 alone", c.Junctions, c.Bytes)
		}
		// Separators that are marks alone keep a pose beside them.
		c, err = CondensePoints(dim, m.g.Values.Poses, m.g.Values.Points, m.terms(), []int32{41, 44})
		if err != nil {
			t.Fatal(err)
		}
		if len(c.Junctions) != 3 || c.Junctions[0] >= 40 || len(c.Cliques) != 1 {
			t.Errorf("junctions %v, want marks 41 and 44 and one pose", c.Junctions)
		}
	}
}
