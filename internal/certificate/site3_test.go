package certificate

import (
	"encoding/csv"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/partition"
)

// The worked example with three robots of which testdata/site3 of package partition tells; the figures are from a separate program.

func table(t testing.TB, name string) [][]float64 {
	t.Helper()
	f, err := os.Open("../../partition/testdata/site3/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out [][]float64
	for _, row := range rows[1:] {
		numbers := make([]float64, len(row))
		for i, s := range row {
			if numbers[i], err = strconv.ParseFloat(s, 64); err != nil {
				t.Fatal(err)
			}
		}
		out = append(out, numbers)
	}
	return out
}

func pose(c []float64) lie.SE3 {
	return lie.FromQuat([3]float64(c[:3]), lie.Quat{c[4], c[5], c[6], c[3]})
}

func info(sigma []float64) *[36]float64 {
	var m [36]float64
	for i, s := range sigma[:6] {
		m[7*i] = 1 / (s * s)
	}
	return &m
}

// site3 is the survey with its true ties.
func site3(t testing.TB) (*posegraph.Graph, *posegraph.Between) {
	const keyframes = 90
	var poses []lie.SE3
	for _, c := range table(t, "poses.csv") {
		if int(c[0])*keyframes+int(c[1]) != len(poses) {
			t.Fatalf("keyframe %v of robot %v out of order", c[1], c[0])
		}
		poses = append(poses, pose(c[2:]))
	}
	g := posegraph.New(6, poses)
	b := g.AddBetween()
	at := func(robot, key float64) int32 { return int32(robot)*keyframes + int32(key) }
	for _, c := range table(t, "edges.csv") {
		b.Add(at(c[0], c[1]), at(c[0], c[2]), pose(c[3:]), info(c[10:]))
	}
	for _, c := range table(t, "ties.csv") {
		if c[18] == 1 {
			b.Add(at(c[1], c[2]), at(c[3], c[4]), pose(c[5:]), info(c[12:]))
		}
	}
	return g, b
}

func always() bool { return true }

func certify(t testing.TB, g *posegraph.Graph, b *posegraph.Between) Result {
	t.Helper()
	r, err := Certify(g, b, always)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// All sigmas of the example are the same along all axes, so the cost of the package comment is twice the usual one but for what the chord
// is shorter than the arc.
func TestSite3(t *testing.T) {
	g, b := site3(t)
	if err := posegraph.Chordal(g, g.Anchors()); err != nil {
		t.Fatal(err)
	}
	r := certify(t, g, b)
	const optimum = 38.8085219845 // F of the adjustment
	if !r.Certified || math.Abs(r.Objective-2*optimum) > 1e-5*2*optimum || !(r.Tolerance <= 1e-3) {
		t.Errorf("%+v, want certified, objective near %g", r, 2*optimum)
	}
}

// The separate program tested the junctions of the three summaries: of each clique the relative poses from its reference, each with the
// covariance that it has in the clique.
func TestSite3Junctions(t *testing.T) {
	const keyframes = 90
	g, b := site3(t)
	if err := posegraph.Chordal(g, g.Anchors()); err != nil {
		t.Fatal(err)
	}
	s, err := posegraph.NewSolver(g, g.Anchors(), sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	s.Optimise(posegraph.DefaultOptions())

	type link struct {
		i, j  int32
		z     lie.SE3
		sigma []float64
	}
	var links []link
	var separators [3][]int32
	var within [3][]partition.Quadratic
	for k := range b.I {
		i, j := b.I[k], b.J[k]
		robot := i / keyframes
		if robot != j/keyframes {
			separators[robot] = append(separators[robot], i%keyframes)
			separators[j/keyframes] = append(separators[j/keyframes], j%keyframes)
			l := link{i, j, b.Z[k], make([]float64, 6)}
			for c := range l.sigma {
				l.sigma[c] = 1 / math.Sqrt(b.Info(k)[7*c])
			}
			links = append(links, l)
			continue
		}
		q := partition.Quadratic{Nodes: []int32{i % keyframes, j % keyframes}, H: make([]float64, 144), B: make([]float64, 12)}
		b.Quadratic(k, &g.Values, q.H, q.B)
		within[robot] = append(within[robot], q)
	}
	for robot := range int32(3) {
		slices.Sort(separators[robot])
		poses := g.Values.Poses[robot*keyframes : (robot+1)*keyframes]
		c, err := partition.CondenseAt(6, poses, within[robot], slices.Compact(separators[robot]))
		if err != nil {
			t.Fatal(err)
		}
		for _, clique := range c.Cliques {
			m := len(clique.B)
			var cov mat.Dense
			if err := cov.Inverse(mat.NewDense(m, m, clique.H)); err != nil {
				t.Fatal(err)
			}
			var step mat.VecDense // the bottom of the clique is at minus this
			step.MulVec(&cov, mat.NewVecDense(m, clique.B))
			for k, node := range clique.Nodes[1:] {
				var to lie.Tangent
				l := link{i: robot*keyframes + clique.Nodes[0], j: robot*keyframes + node, sigma: make([]float64, 6)}
				for c := range to {
					to[c] = -step.AtVec(6*k + c)
					l.sigma[c] = math.Sqrt(cov.At(6*k+c, 6*k+c)) // the traces are all that counts
				}
				l.z = poses[clique.Nodes[0]].Between(poses[node]).Plus(to)
				links = append(links, l)
			}
		}
	}
	number := map[int32]int32{}
	var poses []lie.SE3
	for _, l := range links {
		for _, v := range []int32{l.i, l.j} {
			if _, known := number[v]; !known {
				number[v] = int32(len(poses))
				poses = append(poses, g.Values.Poses[v])
			}
		}
	}
	junctions := posegraph.New(6, poses)
	between := junctions.AddBetween()
	for _, l := range links {
		between.Add(number[l.i], number[l.j], l.z, info(l.sigma))
	}
	r := certify(t, junctions, between)
	t.Logf("%d junctions: %+v", len(poses), r)
	if !r.Certified || math.Abs(r.Objective-71.118606) > 1e-3*71.118606 || math.Abs(r.Gap-174.0) > 1e-3*174 || !(r.Tolerance <= 1e-3) {
		t.Errorf("%+v, want certified, objective 71.118606, gap 174.0, tolerance at most 1e-3", r)
	}
}

// From starts that have nothing to do with the map, the lowest bottom is certified and no other.
func TestWrongBottomsAreRefused(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 8))
	best, certified := math.Inf(1), map[bool]int{}
	var all []Result
	for range 25 {
		g, b := site3(t)
		// The frames of the second and the third robot anywhere, and bent.
		for robot := 1; robot < 3; robot++ {
			frame := lie.Exp(lie.Tangent{9 * r.NormFloat64(), 9 * r.NormFloat64(), 9 * r.NormFloat64(), 2 * r.NormFloat64(), 2 * r.NormFloat64(), 2 * r.NormFloat64()})
			for k := range 90 {
				x := &g.Values.Poses[90*robot+k]
				*x = frame.Mul(*x)
				if k%15 == 0 {
					frame = frame.Mul(lie.Exp(lie.Tangent{3: 2 * r.NormFloat64(), 5: 3 * r.NormFloat64()}))
				}
			}
		}
		x := certify(t, g, b)
		all = append(all, x)
		best = math.Min(best, x.Objective)
	}
	for _, x := range all {
		lowest := x.Objective < best*(1+1e-6)
		certified[lowest]++
		if x.Certified != lowest {
			t.Errorf("%+v, the lowest being %g", x, best)
		}
	}
	if certified[true] == 0 || certified[false] == 0 || math.Abs(best-77.617) > 1e-3 {
		t.Errorf("%d at the lowest, %g, and %d at others: want some of both, and 77.617", certified[true], best, certified[false])
	}
}

// Round a closed ring of equal headings the headings may also turn once or more in all: for n poses such a turn is a bottom of its own
// as long as its steps stay below a quarter turn.
func TestRing(t *testing.T) {
	const n = 24
	for turns := range 5 {
		var poses []lie.SE3
		for i := range n {
			poses = append(poses, lie.Exp2([3]float64{0, 0, 2 * math.Pi * float64(turns*i) / n}).Spatial())
		}
		g := posegraph.New(3, poses)
		b := g.AddBetween()
		for i := range int32(n) {
			b.Add(i, (i+1)%n, lie.Identity(), info([]float64{1, 1, 1, 1, 1, 0.1}))
		}
		r := certify(t, g, b)
		if want := turns == 0; r.Certified != want {
			t.Errorf("%d turns: %+v", turns, r)
		}
		// kappa is 50, and the squared distance of two rotations 4 (1 - cos).
		if want := n * 50 * 4 * (1 - math.Cos(2*math.Pi*float64(turns)/n)); math.Abs(r.Objective-want) > 1e-6*(1+want) {
			t.Errorf("%d turns: objective %g, want %g", turns, r.Objective, want)
		}
	}
}
