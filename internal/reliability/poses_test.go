package reliability

import (
	"encoding/csv"
	"fmt"
	"math"
	"os"
	"slices"
	"strings"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
)

// The two-robot net as a pose graph: names of poses and edges, and what was published of them.
type poseNet struct {
	g     *posegraph.Graph
	b     *posegraph.Between
	names []string
	edges []string
	pairs [][2]int32
	redun []float64
	test  []float64 // NaN: not checkable
	total float64
	dof   float64
}

func readPoseNet(t *testing.T, name string) *poseNet {
	f, err := os.Open("testdata/two_robot_net.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	n := &poseNet{}
	var poses []lie.SE3
	for _, r := range rows {
		if r[0] == name && r[1] == "pose" {
			n.names = append(n.names, r[2])
			poses = append(poses, planarPose(number(t, r[4]), number(t, r[5]), number(t, r[6])))
		}
	}
	n.g = posegraph.New(3, poses)
	n.b = n.g.AddBetween()
	for _, r := range rows {
		switch {
		case r[0] != name:
		case r[1] == "edge":
			i, j := int32(slices.Index(n.names, r[2])), int32(slices.Index(n.names, r[3]))
			var info [36]float64
			for c, at := range [3]int{0, 1, 5} {
				s := number(t, r[7+c])
				info[7*at] = 1 / (s * s)
			}
			n.b.Add(i, j, planarPose(number(t, r[4]), number(t, r[5]), number(t, r[6])), &info)
			n.edges, n.pairs = append(n.edges, r[2]+"-"+r[3]), append(n.pairs, [2]int32{i, j})
			n.redun = append(n.redun, number(t, r[10]))
			if r[11] == "not_checkable" {
				n.test = append(n.test, math.NaN())
			} else {
				n.test = append(n.test, number(t, r[11]))
			}
		case r[1] == "global":
			n.total, n.dof = number(t, r[4]), number(t, r[5])
		}
	}
	if len(n.edges) != 9 {
		t.Fatalf("%d edges in %s", len(n.edges), name)
	}
	return n
}

func planarPose(x, y, turn float64) lie.SE3 {
	return lie.SE2{X: x, Y: y, C: math.Cos(turn), S: math.Sin(turn)}.Spatial()
}

// assess adjusts and returns the figures of every edge.
func (n *poseNet) assess(t *testing.T) (all []Figures, total float64) {
	s, err := posegraph.NewSolver(n.g, []int32{0}, sparse.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if r := s.Optimise(posegraph.DefaultOptions()); r.Stop != posegraph.Converged {
		t.Fatal(r.Stop)
	}
	sigma, err := s.Covariance()
	if err != nil {
		t.Fatal(err)
	}
	v := &n.g.Values
	for k := range n.edges {
		r := n.b.Residual(k, v)
		p := make([]float64, 9)
		n.b.Predicted(k, v, sigma, p)
		all = append(all, Assess([]float64{r[0], r[1], r[5]}, n.b.Info(k), p))
	}
	return all, 2 * n.g.Cost()
}

// T, redundancies and the test of every edge to the digits given; what hangs by one edge is not checkable; edges that no test can
// tell apart have the same statistic and are found as sets from the graph alone.
func TestTwoRobotNet(t *testing.T) {
	for _, name := range []string{"consistent", "one_false_link_a2_b2"} {
		n := readPoseNet(t, name)
		all, total := n.assess(t)
		near(t, name+" T", total, n.total, 1e-9*n.total)
		sum := 0.0
		for k := range all {
			f := &all[k]
			sum += f.Total()
			near(t, name+" "+n.edges[k]+" redundancy", f.Total(), n.redun[k], 5.1e-6)
			if math.IsNaN(n.test[k]) {
				if f.DoF != 0 || !math.IsNaN(f.Detectable[0]) {
					t.Errorf("%s %s: %+v, want not checkable", name, n.edges[k], f)
				}
				continue
			}
			near(t, name+" "+n.edges[k]+" test", f.T, n.test[k], 3e-7*n.test[k])
			if f.DoF != 3 {
				t.Errorf("%s %s: %d degrees of freedom", name, n.edges[k], f.DoF)
			}
		}
		near(t, name+" sum of redundancies", sum, n.dof, 1e-8)

		class := Cuts(len(n.names), n.pairs)
		sets := map[int32][]string{}
		for k, c := range class {
			sets[c] = append(sets[c], n.edges[k])
			for j := range k {
				same := math.Abs(all[k].T-all[j].T) < 1e-4*all[k].T // the residuals of these are not zero: agreement to first order
				if all[k].DoF > 0 && all[j].DoF > 0 && (class[j] == c) != same {
					t.Errorf("%s: %s and %s: statistics %g and %g, classes %d and %d", name, n.edges[k], n.edges[j], all[k].T, all[j].T, c, class[j])
				}
			}
		}
		var got []string
		for c := range int32(len(sets)) {
			got = append(got, strings.Join(sets[c], " "))
		}
		if want := []string{"a0-a1 b0-b1", "a1-a2 b2-b3 a1-b3", "a2-a3 b1-b2 a3-b1", "a2-b2"}; fmt.Sprint(got) != fmt.Sprint(want) {
			t.Errorf("%s: sets %q, want %q", name, got, want)
		}
	}
}

// Snooping strikes out the false link alone: what is left passes.
func TestSnoopOnPoses(t *testing.T) {
	n := readPoseNet(t, "one_false_link_a2_b2")
	got, err := Snoop(len(n.edges), 5, func(struck []bool) ([]float64, error) {
		for k, out := range struck {
			n.b.W[k] = 1
			if out {
				n.b.W[k] = 0
			}
		}
		all, _ := n.assess(t)
		excess := make([]float64, len(all))
		for k := range all {
			if all[k].DoF > 0 {
				excess[k] = all[k].T / Bound(all[k].DoF)
			}
		}
		return excess, nil
	})
	if err != nil || len(got) != 1 || n.edges[got[0]] != "a2-b2" {
		t.Fatalf("struck out %v, %v", got, err)
	}
}
