package reliability

import (
	"encoding/csv"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// linear is a net of observations A x = l of one component each, sets of d of them making one measurement.
type linear struct {
	a     *mat.Dense
	l     []float64
	sigma []float64
}

// adjust solves the net with variances times scale and returns residuals A x - l, the solution and its covariance; what is struck
// out does not count.
func (n *linear) adjust(struck []bool, scale []float64) (v, x []float64, q *mat.Dense) {
	rows, cols := n.a.Dims()
	h, b := mat.NewDense(cols, cols, nil), make([]float64, cols)
	for i := range rows {
		if struck != nil && struck[i] {
			continue
		}
		w := 1 / (n.sigma[i] * n.sigma[i])
		if scale != nil {
			w /= scale[i]
		}
		for j := range cols {
			b[j] += w * n.a.At(i, j) * n.l[i]
			for k := range cols {
				h.Set(j, k, h.At(j, k)+w*n.a.At(i, j)*n.a.At(i, k))
			}
		}
	}
	q = mat.NewDense(cols, cols, nil)
	if err := q.Inverse(h); err != nil {
		return nil, nil, nil
	}
	var sol, res mat.Dense
	sol.Mul(q, mat.NewDense(cols, 1, b))
	res.Mul(n.a, &sol)
	v = mat.Col(nil, 0, &res)
	for i := range v {
		v[i] -= n.l[i]
	}
	return v, mat.Col(nil, 0, &sol), q
}

// figures assesses observations i to i+d as one measurement.
func (n *linear) figures(v []float64, q *mat.Dense, i, d int, scale []float64) Figures {
	_, cols := n.a.Dims()
	rows := n.a.Slice(i, i+d, 0, cols)
	var aq, p mat.Dense
	aq.Mul(rows, q)
	p.Mul(&aq, rows.T())
	omega := make([]float64, d*d)
	for c := range d {
		omega[c*(d+1)] = 1 / (n.sigma[i+c] * n.sigma[i+c])
		if scale != nil {
			omega[c*(d+1)] /= scale[i+c]
		}
	}
	return Assess(v[i:i+d], omega, p.RawMatrix().Data)
}

type levelling struct {
	linear
	points []string
	names  []string
	rows   [][]string // of the observations
	height map[string]float64
	total  float64
	dof    int
}

func readLevelling(t *testing.T, name string) *levelling {
	f, err := os.Open("testdata/levelling_nets.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	n := &levelling{height: map[string]float64{}}
	fixed := ""
	for _, r := range rows {
		switch {
		case r[0] != name:
		case r[1] == "point":
			n.height[r[2]] = number(t, r[5])
			if r[6] == "0" {
				fixed = r[2]
			} else {
				n.points = append(n.points, r[2])
			}
		case r[1] == "obs":
			n.names, n.rows = append(n.names, r[2]), append(n.rows, r)
		default:
			n.total, n.dof = number(t, r[3]), int(number(t, r[5]))
		}
	}
	if len(n.names) == 0 {
		t.Fatalf("no net %s", name)
	}
	n.a = mat.NewDense(len(n.names), len(n.points), nil)
	for i, r := range n.rows {
		l := number(t, r[3])
		from, to, _ := strings.Cut(r[2], "-")
		for p, sign := range map[string]float64{from: -1, to: 1} {
			if p == fixed {
				l -= sign * n.height[fixed]
			} else {
				n.a.Set(i, slices.Index(n.points, p), sign)
			}
		}
		n.l, n.sigma = append(n.l, l), append(n.sigma, number(t, r[4]))
	}
	return n
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	x, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return x
}

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s: %.10g, want %.10g", what, got, want)
	}
}

const eight = 5.1e-8 // half of the last of eight digits, relative

// Adjusted heights, residuals, redundancies, normalised residuals, detectable errors and T of the worked nets, to the digits given.
func TestLevellingNets(t *testing.T) {
	for _, name := range []string{"ghilani_wolf_12.1", "loop_fwd_rev", "mikhail_ackermann_7.1_net", "ghilani_wolf_12.1_plus_50mm_on_B-D"} {
		n := readLevelling(t, name)
		v, x, q := n.adjust(nil, nil)
		for i, p := range n.points {
			near(t, name+" "+p, x[i], n.height[p], 5e-10*math.Max(1, math.Abs(x[i])))
		}
		total, redundancy := 0.0, 0.0
		for i, r := range n.rows {
			f := n.figures(v, q, i, 1, nil)
			// Heights of 440 m cost the residuals some 1e-12.
			near(t, name+" "+r[2]+" v", v[i], number(t, r[7]), eight*math.Abs(v[i])+2e-12)
			near(t, name+" "+r[2]+" r", f.Redundancy[0], number(t, r[8]), eight)
			near(t, name+" "+r[2]+" w", f.W[0], number(t, r[9]), eight*math.Abs(f.W[0])+1e-9)
			near(t, name+" "+r[2]+" detectable", f.Detectable[0], number(t, r[10]), eight*f.Detectable[0])
			near(t, name+" "+r[2]+" T", f.T, f.W[0]*f.W[0], 1e-9*f.T)
			total += v[i] * v[i] / n.sigma[i] / n.sigma[i]
			redundancy += f.Total()
		}
		near(t, name+" T", total, n.total, 6e-9*n.total)
		near(t, name+" sum of redundancies", redundancy, float64(n.dof), 1e-10)
	}
}

// The planted blunder of 50 mm makes five observations exceed the bound; snooping removes it and no other.
func TestSnoopFindsTheBlunderAlone(t *testing.T) {
	n := readLevelling(t, "ghilani_wolf_12.1_plus_50mm_on_B-D")
	exceeding := -1
	test := func(struck []bool) ([]float64, error) {
		v, _, q := n.adjust(struck, nil)
		out := make([]float64, len(v))
		count := 0
		for i := range v {
			if struck[i] {
				continue
			}
			f := n.figures(v, q, i, 1, nil)
			out[i] = f.T / Bound(1)
			if out[i] > 1 {
				count++
			}
		}
		if exceeding < 0 {
			exceeding = count
		}
		return out, nil
	}
	got, err := Snoop(len(n.names), 4, test)
	if err != nil {
		t.Fatal(err)
	}
	if exceeding != 5 || len(got) != 1 || n.names[got[0]] != "B-D" {
		t.Fatalf("%d exceed the bound, %v removed, want 5 and B-D", exceeding, got)
	}
	struck := make([]bool, len(n.names))
	struck[got[0]] = true
	v, x, q := n.adjust(struck, nil)
	// Heights by exact fractions.
	for p, want := range map[string]float64{"B": 448.1067704918, "C": 453.4675573770, "D": 444.9441475410} {
		near(t, p, x[slices.Index(n.points, p)], want, 1e-9)
	}
	total := 0.0
	for i, want := range map[int]float64{0: 0.4385, 1: 0.4385, 2: -0.1393, 3: -0.1393, 5: -0.8412} {
		near(t, "w of "+n.names[i], n.figures(v, q, i, 1, nil).W[0], want, 5e-5)
		total += v[i] * v[i] / n.sigma[i] / n.sigma[i]
	}
	near(t, "T", total, 0.754098, 5e-7)
	if rest, _ := Snoop(len(n.names), 0, test); len(rest) != 0 {
		t.Errorf("a limit of none lets %v be removed", rest)
	}
}

// randomNet draws a net of measurements with d components each.
func randomNet(r *rand.Rand, measurements, d, unknowns int) *linear {
	n := &linear{a: mat.NewDense(measurements*d, unknowns, nil)}
	for i := range measurements * d {
		for j := range unknowns {
			if r.IntN(3) > 0 || i == j {
				n.a.Set(i, j, r.NormFloat64())
			}
		}
		n.l, n.sigma = append(n.l, r.NormFloat64()), append(n.sigma, math.Exp(r.NormFloat64()))
	}
	return n
}

// Against adjusting again without the measurement, and with an error put into it.
func TestAssessAgainstAdjustingAgain(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 5))
	for range 40 {
		d := 1 + r.IntN(4)
		unknowns := 1 + r.IntN(5)
		n := randomNet(r, unknowns/d+3+r.IntN(4), d, unknowns)
		rows, _ := n.a.Dims()
		v, x, q := n.adjust(nil, nil)
		sum := 0.0
		for i := 0; i < rows; i += d {
			f := n.figures(v, q, i, d, nil)
			sum += f.Total()
			struck := make([]bool, rows)
			for c := range d {
				struck[i+c] = true
			}
			without, _, qw := n.adjust(struck, nil)
			if without == nil {
				t.Fatal("a net that hangs on one measurement")
			}
			// What the others predict, and the test of the difference.
			cov := mat.NewSymDense(d, nil)
			_, cols := n.a.Dims()
			part := n.a.Slice(i, i+d, 0, cols)
			var aq, p mat.Dense
			aq.Mul(part, qw)
			p.Mul(&aq, part.T())
			for a := range d {
				for b := a; b < d; b++ {
					cov.SetSym(a, b, p.At(a, b))
				}
				cov.SetSym(a, a, p.At(a, a)+n.sigma[i+a]*n.sigma[i+a])
				near(t, "apart", f.Apart[a], without[i+a], 1e-7*(1+math.Abs(without[i+a])))
			}
			var chol mat.Cholesky
			var e mat.VecDense
			if !chol.Factorize(cov) {
				t.Fatal("singular")
			}
			w := mat.NewVecDense(d, without[i:i+d])
			if err := chol.SolveVecTo(&e, w); err != nil {
				t.Fatal(err)
			}
			near(t, "T", f.T, mat.Dot(&e, w), 1e-7*(1+f.T))
			if f.DoF != d {
				t.Errorf("dof %d, want %d", f.DoF, d)
			}
			// An error of the detectable size moves its normalised residual by Delta and no unknown by more than Effect sigmas.
			for c := range d {
				n.l[i+c] += f.Detectable[c]
				moved, y, _ := n.adjust(nil, nil)
				g := n.figures(moved, q, i, d, nil)
				near(t, "shift of w", math.Abs(g.W[c]-f.W[c]), Delta, 1e-7)
				n.l[i+c] -= f.Detectable[c]
				// In the direction of the move the bound is reached: dx' Q^-1 dx = Effect^2.
				var h, hd mat.Dense
				dx := mat.NewDense(cols, 1, nil)
				for j := range x {
					dx.Set(j, 0, y[j]-x[j])
				}
				if err := h.Inverse(q); err != nil {
					t.Fatal(err)
				}
				hd.Mul(&h, dx)
				near(t, "effect", f.Effect[c], math.Sqrt(mat.Dot(dx.ColView(0), hd.ColView(0))), 1e-6*(1+f.Effect[c]))
			}
		}
		near(t, "sum of redundancies", sum, float64(rows-unknowns), 1e-8)
	}
}

// What was not measured, and what nothing checks, is told from what passes.
func TestAssessWhatIsNotChecked(t *testing.T) {
	f := Assess([]float64{0, 1}, []float64{4, 0, 0, 0}, []float64{0.25, 0, 0, 9})
	if f.DoF != 0 || f.T != 0 || !math.IsNaN(f.W[0]) || !math.IsNaN(f.Detectable[0]) || !math.IsNaN(f.Apart[0]) {
		t.Errorf("a measurement that nothing checks: %+v", f)
	}
	f = Assess([]float64{1, 7}, []float64{4, 0, 0, 0}, []float64{0.125, 0, 0, 9})
	if f.DoF != 1 || math.Abs(f.T-8) > 1e-12 || math.Abs(f.Redundancy[0]-0.5) > 1e-12 || f.Redundancy[1] != 0 || !math.IsNaN(f.W[1]) {
		t.Errorf("one component measured and half checked: %+v", f)
	}
	near(t, "apart", f.Apart[0], 2, 1e-12)
	f = Assess([]float64{1, 2}, make([]float64, 4), []float64{1, 0, 0, 1})
	if f.DoF != 0 || !math.IsNaN(f.W[0]) {
		t.Errorf("nothing measured: %+v", f)
	}
	f = Assess([]float64{1, 2}, []float64{1, 0, 0, 1}, []float64{1, 0, 0, 0.5})
	if f.DoF != 1 || !math.IsNaN(f.W[0]) || !math.IsNaN(f.Apart[1]) || math.Abs(f.T-8) > 1e-12 {
		t.Errorf("one component checked of two: %+v", f)
	}
}

func TestBounds(t *testing.T) {
	near(t, "critical", Critical, 3.290526731, 1e-9)
	near(t, "delta", Delta, 4.13214796506, 1e-9)
	for dof, want := range map[int]float64{1: 10.827566170663, 2: 13.815510557964, 3: 16.266236196238, 6: 22.457744484825} {
		near(t, "bound", Bound(dof), want, 1e-8)
		near(t, "survival", Survival(want, dof), Alpha, 1e-12)
	}
}
