package evidence

import (
	"encoding/csv"
	"math"
	"os"
	"slices"
	"strconv"
	"testing"

	"selvage/internal/lie"
)

// testdata/site3_*.csv: a simulated survey of three robots with 90 keyframes each, 12 true ties and 5 false ones, and the
// figures below: made for this project with an independent program.

func table(t *testing.T, name string) [][]float64 {
	t.Helper()
	f, err := os.Open("testdata/" + name)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var out [][]float64
	for _, r := range rows[1:] {
		v := make([]float64, len(r))
		for i := range r {
			if v[i], err = strconv.ParseFloat(r[i], 64); err != nil {
				t.Fatal(err)
			}
		}
		out = append(out, v)
	}
	return out
}

func pose(v []float64) lie.SE3 {
	return lie.FromQuat([3]float64{v[0], v[1], v[2]}, lie.Quat{v[4], v[5], v[6], v[3]})
}

func site3(t *testing.T) (units []Unit, ties []simTie) {
	t.Helper()
	x := make([][]lie.SE3, 3)
	for _, r := range table(t, "site3_poses.csv") {
		x[int(r[0])] = append(x[int(r[0])], pose(r[2:9]))
	}
	edges := make([][]simEdge, 3)
	for _, r := range table(t, "site3_edges.csv") {
		edges[int(r[0])] = append(edges[int(r[0])], simEdge{int(r[1]), int(r[2]), pose(r[3:10]), [6]float64(r[10:16])})
	}
	for u := range x {
		inv := adjust(x[u], edges[u], 3, 6)
		travel := make([]float64, len(x[u]))
		for k := 1; k < len(travel); k++ {
			travel[k] = travel[k-1] + distance(x[u][k-1].T, x[u][k].T)
		}
		units = append(units, Unit{Name: "robot " + strconv.Itoa(u), Poses: x[u], TravelM: travel, Covariance: marginals(x[u], inv, 3, 6)})
	}
	for _, r := range table(t, "site3_ties.csv") {
		tie := simTie{Tie: Tie{From: End{int(r[1]), int(r[2])}, To: End{int(r[3]), int(r[4])}, Z: pose(r[5:12])}, true: r[18] == 1}
		for k := 0; k < 6; k++ {
			tie.Cov[7*k] = r[12+k] * r[12+k]
		}
		ties = append(ties, tie)
	}
	return units, ties
}

func TestPairwiseConsistencyOfSite3(t *testing.T) {
	units, ties := site3(t)
	o := DefaultOptions(3)
	o.BiasYaw = 0 // the figures are without it
	b := newBody(units, bare(ties), o)
	if math.Abs(b.gate-16.8119) > 1e-4 || math.Abs(b.refuse-22.4577) > 1e-4 {
		t.Errorf("gates %.4f and %.4f, want 16.8119 and 22.4577", b.gate, b.refuse)
	}
	for _, c := range []struct {
		ties   []int
		upper  []float64
		clique []int
	}{
		{[]int{0, 1, 2, 15}, []float64{5.3754, 3.925, 35449.0, 2.0226, 19870.0, 17310.0}, []int{0, 1, 2}},
		{[]int{3, 4, 5, 6, 16}, []float64{8.9297, 4.361, 4.14, 33527.0, 4.5665, 1.2332, 39006.0, 3.9433, 33340.0, 36910.0}, []int{3, 4, 5, 6}},
		{[]int{7, 8, 9, 10, 11, 12, 13, 14}, []float64{12.012, 4.7838, 5.9138, 7.4448, 1232.5, 35495.0, 24787.0, 6.5794, 12.808, 4.6177, 2215.0,
			30836.0, 37422.0, 9.704, 6.229, 647.73, 34327.0, 22605.0, 11.418, 1047.1, 34523.0, 22322.0, 2536.0, 27464.0, 26211.0, 36987.0,
			36387.0, 9.4076}, []int{7, 8, 9, 10, 11}},
	} {
		k := 0
		for p := range c.ties {
			for q := p + 1; q < len(c.ties); q++ {
				got, want := b.misfit(c.ties[p], c.ties[q]), c.upper[k]
				k++
				// Figures were printed with five digits.
				if math.Abs(got-want) > 1e-2+1e-4*want*b2f(want > 100) {
					t.Errorf("ties %d and %d: %.4f, want %.4f", c.ties[p], c.ties[q], got, want)
				}
			}
		}
		hs := b.hypothesise(c.ties)
		if !slices.Equal(hs[0].members, c.clique) {
			t.Errorf("largest consistent set of %v is %v, want %v", c.ties, hs[0].members, c.clique)
		}
	}
}

func b2f(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

func TestSite3(t *testing.T) {
	units, ties := site3(t)
	s := simFleet{dim: 3, units: units}
	r, c := s.decide(ties)
	for i, f := range r.Ties {
		t.Logf("tie %d true %v: %v, %d places, margin %d: %s", i, ties[i].true, f.Verdict, f.Places, f.Margin, f.Reason)
	}
	if c.falseHeld != 0 || c.joined != 3 || c.trueHeld < 11 {
		t.Errorf("%d false ties held, %d true of 12, %d robots joined", c.falseHeld, c.trueHeld, c.joined)
	}
}
