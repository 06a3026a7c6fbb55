package scenarios

import (
	"math"
	"os"
	"slices"
	"testing"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/partition"
)

// joint returns e' A e and its degrees of freedom at the optimum of a simulated outing in which every measurement is true and no error is
// larger than it says. A is the information of the exact summaries of all robots and the ties, e the error of their junctions, all
// seen from the first of them.
func joint(t *testing.T, name string, seed uint64) (sum float64, freedoms int) {
	_, w := world(t, name, seed, func(sc *Scenario) {
		sc.Duration, sc.Fleet.Robots, sc.FrontEnd.HeadingBias, sc.FalseTies = 1200, 4, 0, FalseTiesSpec{ClusterSize: 2, ClusterSpacing: 10}
	})
	p, err := adjust.New(w.Survey, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(adjust.Auto); err != nil {
		t.Fatal(err)
	}
	if err := p.Analyse(1); err != nil {
		t.Fatal(err)
	}
	if r := p.Solve(posegraph.DefaultOptions()); r.Stop != posegraph.Converged {
		t.Fatalf("%s, seed %d: %v", name, seed, r.Stop)
	}
	d, b := p.Graph.Dim, p.Factors
	component := []int{0, 1, 5}
	if d == 6 {
		component = []int{0, 1, 2, 3, 4, 5}
	}
	// The errors of all poses; only those of junctions are used.
	truth := make(map[adjust.Key]lie.SE3, len(p.Keys))
	for _, x := range w.Survey.Truth {
		truth[adjust.Key{Robot: x.Robot, Session: x.Session, ID: x.Key}] = adjust.Pose(x.Pose)
	}
	first := make([]int32, p.Islands) // junction of each island
	for i := range first {
		first[i] = -1
	}
	error := func(v int32) []float64 {
		f := first[p.Island[v]]
		ours := p.Graph.Values.Poses[f].Between(p.Graph.Values.Poses[v])
		given, mine := truth[p.Keys[f]], truth[p.Keys[v]]
		off := ours.Between(given.Between(mine))
		e := off.Log()
		out := make([]float64, d)
		for i, c := range component {
			out[i] = e[c]
		}
		return out
	}
	form := func(nodes []int32, h []float64) float64 {
		var e []float64
		for _, v := range nodes {
			e = append(e, error(v)...)
		}
		sum := 0.0
		for r, x := range e {
			for c, y := range e {
				sum += x * h[r*len(e)+c] * y
			}
		}
		return sum
	}
	start := map[string]int32{}
	for v := len(p.Keys) - 1; v >= 0; v-- {
		start[p.Keys[v].Robot] = int32(v)
	}
	within := map[string][]partition.Quadratic{}
	separators := map[string][]int32{}
	ties := map[int]bool{}
	for _, k := range p.Tie {
		ties[k] = true
		for _, v := range []int32{b.I[k], b.J[k]} {
			robot := p.Keys[v].Robot
			separators[robot] = append(separators[robot], v-start[robot])
		}
	}
	for k := range b.I {
		if robot := p.Keys[b.I[k]].Robot; !ties[k] {
			q := partition.Quadratic{Nodes: []int32{b.I[k] - start[robot], b.J[k] - start[robot]}, H: make([]float64, 4*d*d), B: make([]float64, 2*d)}
			b.Quadratic(k, &p.Graph.Values, q.H, q.B)
			within[robot] = append(within[robot], q)
		}
	}
	junctions := 0
	for i := range w.Survey.Robots {
		robot := w.Survey.Robots[i].ID
		from, n := start[robot], int32(len(w.Survey.Robots[i].Keyframes))
		if len(separators[robot]) == 0 {
			continue
		}
		slices.Sort(separators[robot])
		c, err := partition.CondenseAt(d, p.Graph.Values.Poses[from:from+n], within[robot], slices.Compact(separators[robot]))
		if err != nil {
			t.Fatal(err)
		}
		junctions += len(c.Junctions)
		if f := &first[p.Island[from]]; *f < 0 {
			*f = from + c.Junctions[0]
		}
		for _, clique := range c.Cliques {
			sum += form(numbered(clique.Nodes, from), completed(p.Graph.Values.Poses[from:from+n], &clique, d))
		}
	}
	for k := range ties {
		h, g := make([]float64, 4*d*d), make([]float64, 2*d)
		b.Quadratic(k, &p.Graph.Values, h, g)
		sum += form([]int32{b.I[k], b.J[k]}, h)
	}
	islands := 0
	for _, f := range first {
		if f >= 0 {
			islands++
		}
	}
	return sum, d * (junctions - islands)
}

func numbered(nodes []int32, from int32) []int32 {
	out := slices.Clone(nodes)
	for i := range out {
		out[i] += from
	}
	return out
}

// completed gives a clique back the rows of its reference: under a common motion it stays as it is.
func completed(poses []lie.SE3, c *partition.Clique, d int) []float64 {
	k := len(c.Nodes)
	n := d * k
	h := make([]float64, n*n)
	m := n - d
	// e of node q is its own step less Ad(P^-1) times the one of the reference, P the pose of q in the reference.
	j := make([]float64, m*n)
	for q := 1; q < k; q++ {
		back := poses[c.Nodes[q]].Between(poses[c.Nodes[0]])
		var ad []float64
		if d == 3 {
			a := lie.Planar(&back).Adjoint()
			ad = a[:]
		} else {
			a := back.Adjoint()
			ad = a[:]
		}
		for r := range d {
			row := j[((q-1)*d+r)*n:]
			row[q*d+r] = 1
			for col := range d {
				row[col] = -ad[r*d+col]
			}
		}
	}
	hj := make([]float64, m*n)
	for r := range m {
		for q := range m {
			if x := c.H[r*m+q]; x != 0 {
				for col := range n {
					hj[r*n+col] += x * j[q*n+col]
				}
			}
		}
	}
	for q := range m {
		for r := range n {
			if x := j[q*n+r]; x != 0 {
				for col := range n {
					h[r*n+col] += x * hj[q*n+col]
				}
			}
		}
	}
	return h
}

// Errors are as large as the exact summaries say: the mean of e' A e over its degrees of freedom (NEES: Bar-Shalom, Li, Kirubarajan,
// 'Estimation with Applications to Tracking and Navigation', 2001) lies within the band that chi-square has at 99.9 %. Junctions of
// one run are correlated, and so they are taken together; runs are independent.
func TestNEES(t *testing.T) {
	seeds := uint64(6)
	if os.Getenv("SELVAGE_LONG") == "1" {
		seeds = 50
	}
	for _, name := range BuiltinNames() {
		sum, freedoms := 0.0, 0
		for seed := uint64(1); seed <= seeds; seed++ {
			s, f := joint(t, name, seed)
			sum, freedoms = sum+s, freedoms+f
		}
		mean, band := sum/float64(freedoms), 3.2905*math.Sqrt(2/float64(freedoms))
		t.Logf("%s: mean NEES %.4f of one, %d degrees of freedom in %d runs, band %.4f", name, mean, freedoms, seeds, band)
		if math.Abs(mean-1) > band {
			t.Errorf("%s: mean NEES %.4f of one, want within %.4f", name, mean, band)
		}
	}
}
