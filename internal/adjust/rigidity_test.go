package adjust

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/internal/survey"
)

// pairOf makes two robots that drive 20 m beside each other, without any error, and ties between the given keyframes.
func pairOf(dimension int, kind survey.Kind, at ...[2]int64) *survey.Survey {
	s := &survey.Survey{Meta: survey.Meta{Dimension: dimension}}
	var path [2][]lie.SE3
	for i, id := range []string{"a", "b"} {
		r := survey.Robot{ID: id}
		x := lie.Exp(lie.Tangent{1: 3 * float64(i)})
		step := lie.Exp(lie.Tangent{0: 1, 5: 0.02 * (1 - 2*float64(i))})
		if dimension == 3 {
			step = lie.Exp(lie.Tangent{0: 1, 2: 0.05, 4: 0.03, 5: 0.02 * (1 - 2*float64(i))})
		}
		for k := range int64(20) {
			path[i] = append(path[i], x)
			r.Keyframes = append(r.Keyframes, survey.Keyframe{ID: k, Pose: Folder(&x)})
			if k > 0 {
				r.Relatives = append(r.Relatives, survey.Relative{From: k - 1, To: k, Pose: Folder(&step), Cov: survey.Uncorrelated(0.02, 0.005)})
			}
			x = x.Mul(step)
		}
		s.Robots = append(s.Robots, r)
	}
	for n, k := range at {
		q := path[0][k[0]].Inv().Apply(path[1][k[1]].T)
		flat := math.Hypot(q[0], q[1])
		value := [3]float64{math.Hypot(flat, q[2]), math.Atan2(q[1], q[0]), math.Atan2(q[2], flat)}
		if kind == survey.Position {
			value = q
		}
		e := survey.Sight{Sigma: survey.Unmeasured}
		for c := range 3 {
			if c == 2 && dimension == 2 || kind == survey.Range && c > 0 || kind == survey.Bearing && c == 0 {
				continue
			}
			e.Value[c], e.Sigma[c] = value[c], 0.05
		}
		s.Ties = append(s.Ties, survey.Tie{ID: fmt.Sprint("t", n), FromRobot: "a", FromKey: k[0], ToRobot: "b", ToKey: k[1], Kind: kind, Sight: e})
	}
	return s
}

// given is a problem at the poses of the survey.
func given(t *testing.T, s *survey.Survey) *Problem {
	t.Helper()
	p, err := New(s, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Begin(Given); err != nil {
		t.Fatal(err)
	}
	return p
}

// What holds two frames in the plane and in space: a frame has three freedoms in the plane and six in space, and what is seen from
// one keyframe of one spot leaves the turn about it free.
func TestRigidPairs(t *testing.T) {
	for _, c := range []struct {
		dimension int
		kind      survey.Kind
		at        [][2]int64
		rigid     bool
		wanted    int
	}{
		{2, survey.RangeBearing, [][2]int64{{3, 4}}, false, 0},
		{2, survey.RangeBearing, [][2]int64{{3, 4}, {3, 4}}, false, 0},
		{2, survey.RangeBearing, [][2]int64{{3, 4}, {15, 16}}, true, 2},
		{2, survey.RangeBearing, [][2]int64{{3, 4}, {15, 16}, {9, 2}}, true, 0},
		{2, survey.Position, [][2]int64{{3, 4}, {3, 9}}, true, 2},
		{2, survey.Range, [][2]int64{{3, 4}, {15, 16}}, false, 0},
		{2, survey.Range, [][2]int64{{3, 4}, {15, 10}, {2, 18}}, true, 3},
		{2, survey.Range, [][2]int64{{3, 4}, {15, 10}, {2, 18}, {9, 1}}, true, 0},
		{2, survey.Range, [][2]int64{{3, 4}, {3, 4}, {3, 4}, {3, 4}}, false, 0},
		{2, survey.Bearing, [][2]int64{{3, 4}, {15, 10}, {2, 18}}, true, 3},
		{3, survey.Position, [][2]int64{{3, 4}, {15, 16}}, false, 0},
		{3, survey.Position, [][2]int64{{3, 4}, {15, 16}, {9, 2}}, true, 3},
		{3, survey.Range, [][2]int64{{3, 4}, {15, 10}, {2, 18}, {9, 1}, {19, 12}}, false, 0},
		{3, survey.Range, [][2]int64{{3, 4}, {15, 10}, {2, 18}, {9, 1}, {19, 12}, {1, 7}}, true, 6},
	} {
		what := fmt.Sprintf("dimension %d, %s %v", c.dimension, c.kind, c.at)
		p := given(t, pairOf(c.dimension, c.kind, c.at...))
		r := p.Rigidity()
		if r.Bodies != 2 {
			t.Fatalf("%s: %d bodies", what, r.Bodies)
		}
		if g := r.Groups(nil); (g[0] == g[1]) != c.rigid {
			t.Errorf("%s: groups %v, rigid should be %v", what, g, c.rigid)
		}
		if w := r.Wanted(); c.rigid && len(w) != c.wanted {
			t.Errorf("%s: wanted %v, want %d", what, w, c.wanted)
		}
		if err := p.LeaveOut(); err != nil {
			t.Fatal(err)
		}
		if want := map[bool]int{true: 1, false: 2}[c.rigid]; p.Islands != want {
			t.Errorf("%s: %d islands, want %d", what, p.Islands, want)
		}
		for _, e := range p.Sights() {
			if (e.Set != nil) != c.rigid {
				t.Errorf("%s: left out %v", what, e.Set == nil)
			}
		}
	}
}

// Rank against the information matrix of the whole graph: random marks and sightings between three robots, so few that they hang together
// in some draws and not in others. Two frames hang together if every motion of all poses and marks that costs nothing moves them alike.
func TestRigidityAgainstTheWholeMatrix(t *testing.T) {
	joined, loose := 0, 0
	for seed := range uint64(60) {
		dimension := 2 + int(seed%2)
		y := newYard(seed, yardPlan{dimension: dimension, robots: 3, keyframes: 8, marks: 6, shared: true, encounters: 2 + int(seed%4)})
		s := &y.survey
		r := rand.New(rand.NewPCG(seed, 5))
		for i := range s.Robots {
			robot := &s.Robots[i]
			for k := range robot.Keyframes {
				x := y.truth[Key{Robot: robot.ID, ID: int64(k)}]
				robot.Keyframes[k].Pose = Folder(&x)
			}
			kept := robot.Sightings[:0]
			for _, e := range robot.Sightings {
				if r.Float64() < 0.15 {
					kept = append(kept, e)
				}
			}
			robot.Sightings = kept
		}
		p := given(t, s)
		group := p.Rigidity().Groups(nil)
		want := wholeGroups(t, p)
		if !slices.Equal(group, want) {
			t.Errorf("seed %d: %v, want %v", seed, group, want)
		}
		for i := range group {
			for j := range i {
				if group[i] == group[j] {
					joined++
				} else {
					loose++
				}
			}
		}
	}
	if joined < 30 || loose < 30 {
		t.Errorf("only %d pairs hang together and %d do not", joined, loose)
	}
}

// wholeGroups finds the groups by the null space of the dense matrix of all poses and marks, each robot's poses moving by the common
// motion that its own map allows.
func wholeGroups(t *testing.T, p *Problem) []int32 {
	t.Helper()
	g, d := p.Graph, p.Graph.Dim
	offset := make([]int, g.Variables()+1)
	for v := range g.Variables() {
		width := 3
		if v < len(p.Keys) {
			width = d
		}
		offset[v+1] = offset[v] + width
	}
	n := offset[g.Variables()]
	h := mat.NewSymDense(n, nil)
	add := func(vars [2]int32, q []float64) {
		var at []int
		for _, v := range vars {
			for c := offset[v]; c < offset[v+1]; c++ {
				at = append(at, c)
			}
		}
		for i, a := range at {
			for j, b := range at {
				if a <= b {
					h.SetSym(a, b, h.At(a, b)+q[i*len(at)+j])
				}
			}
		}
	}
	for k := range p.Factors.I {
		q, grad := make([]float64, 4*d*d), make([]float64, 2*d)
		p.Factors.Quadratic(k, &g.Values, q, grad)
		add([2]int32{p.Factors.I[k], p.Factors.J[k]}, q)
	}
	for _, e := range p.Sights() {
		if e.Set == nil {
			continue
		}
		to, width := e.Set.To[e.K], d
		if e.Set.OfPoints() {
			to, width = g.Point(to), 3
		}
		m := d + width
		q, grad := make([]float64, m*m), make([]float64, m)
		e.Set.Quadratic(e.K, &g.Values, q, grad)
		add([2]int32{e.Set.From[e.K], to}, q)
	}
	scale := make([]float64, n)
	for i := range n {
		scale[i] = 1
		if x := h.At(i, i); x > 0 {
			scale[i] = 1 / math.Sqrt(x)
		}
	}
	for i := range n {
		for j := i; j < n; j++ {
			h.SetSym(i, j, h.At(i, j)*scale[i]*scale[j])
		}
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(h, true) {
		t.Fatal("no eigenvalues")
	}
	var u mat.Dense
	eigen.VectorsTo(&u)
	var first []int32 // of each robot
	for v := range p.Keys {
		if v == 0 || p.Keys[v].Robot != p.Keys[v-1].Robot {
			first = append(first, int32(v))
		}
	}
	alike := func(a, b int32) bool {
		sum := 0.0
		for k, value := range eigen.Values(nil) {
			if value > 1e-11 {
				break
			}
			var turned [2][6]float64
			for side, v := range [2]int32{a, b} { // the tangent of the first pose as a motion of the datum
				x := g.Values.Poses[v]
				xi := make([]float64, d)
				for c := range d {
					xi[c] = u.At(offset[v]+c, k) * scale[offset[v]+c]
				}
				if d == 3 {
					ad := lie.Planar(&x).Adjoint()
					for r := range 3 {
						for c := range 3 {
							turned[side][r] += ad[3*r+c] * xi[c]
						}
					}
				} else {
					ad := x.Adjoint()
					for r := range 6 {
						for c := range 6 {
							turned[side][r] += ad[6*r+c] * xi[c]
						}
					}
				}
			}
			for c := range 6 {
				sum += (turned[0][c] - turned[1][c]) * (turned[0][c] - turned[1][c])
			}
		}
		return sum < 1e-12
	}
	group := make([]int32, len(first))
	next := int32(0)
	for i := range group {
		group[i] = -1
		for j := range i {
			if alike(first[i], first[j]) {
				group[i] = group[j]
				break
			}
		}
		if group[i] < 0 {
			group[i] = next
			next++
		}
	}
	return group
}
