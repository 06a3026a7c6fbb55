package reliability

import (
	"encoding/csv"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat"
	"gonum.org/v1/gonum/stat/distuv"
)

// published reads the worked example of seven check points.
func published(t *testing.T) (points []CheckPoint) {
	f, err := os.Open("testdata/check_points.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	for k, row := range rows[1:] {
		var p CheckPoint
		for c := range p.Off {
			if p.Off[c], err = strconv.ParseFloat(row[c+1], 64); err != nil {
				t.Fatal(err)
			}
		}
		p.At = [3]float64{float64(k % 3 * 100), float64(k / 3 * 100)}
		points = append(points, p)
	}
	return points
}

func TestPublishedCheckPoints(t *testing.T) {
	a := Assure(published(t), Area{Max: [2]float64{200, 200}})
	for _, c := range []struct {
		what            string
		got, want, upTo float64
	}{
		// Printed with the example, to the millimetre.
		{"sd of x, printed", a.X.SD, 0.075, 5e-4}, {"sd of y, printed", a.Y.SD, 0.073, 5e-4}, {"sd of z, printed", a.Z.SD, 0.030, 5e-4},
		// Computed from its differences in Python.
		{"sd of x", a.X.SD, 0.074715970, 1e-9}, {"sd of y", a.Y.SD, 0.073410782, 1e-9}, {"sd of z", a.Z.SD, 0.030307943, 1e-9},
		{"mean of x", a.X.Mean, -0.058857143, 1e-9}, {"mean of y", a.Y.Mean, 0.043857143, 1e-9}, {"mean of z", a.Z.Mean, 0.017714286, 1e-9},
		{"rmse of x", a.X.RMSE, 0.090824792, 1e-9}, {"rmse of y", a.Y.RMSE, 0.080887046, 1e-9}, {"rmse of z", a.Z.RMSE, 0.033183473, 1e-9},
		{"radial rmse", a.RMSER, 0.12162178, 1e-8}, {"horizontal", a.Horizontal.M, 0.21014953, 1e-8}, {"vertical", a.Vertical.M, 0.065039606, 1e-9},
		{"equal rmse", Horizontal95(a.RMSER/math.Sqrt2, a.RMSER/math.Sqrt2), 0.21050298, 1e-8},
	} {
		if !(math.Abs(c.got-c.want) <= c.upTo) {
			t.Errorf("%s: %.9f, want %.9f", c.what, c.got, c.want)
		}
	}
	for _, s := range []Statement{a.Horizontal, a.Vertical} {
		if s.Claimed || !strings.HasPrefix(s.Text, "No ") || !strings.Contains(s.Text, "7 check points, at least 20 are needed") {
			t.Errorf("seven points, too few for the standard: %q", s.Text)
		}
	}
	bias := 0
	for _, r := range a.Remarks {
		if strings.HasSuffix(r, "hints at a bias.") {
			bias++
		}
	}
	if bias != 3 { // 0.65, 0.54 and 0.53 of the RMSE
		t.Errorf("remarks %q, want three of a bias", a.Remarks)
	}
}

// The factors of the standard are quantiles of two errors of one sigma, taken together, and of one error.
func TestFactorsAreQuantiles(t *testing.T) {
	circular := math.Sqrt(-2 * math.Log(0.05)) // closed form for two degrees of freedom
	for _, c := range []struct{ got, want float64 }{
		{Horizontal95(1, 1+1e-12), circular}, {Horizontal95(1, 1), circular}, {Vertical95(1), distuv.UnitNormal.Quantile(0.975)},
	} {
		if math.Abs(c.got-c.want) > 2e-4 {
			t.Errorf("%.5f, want %.5f to the four digits of the standard", c.got, c.want)
		}
	}
	for _, c := range []struct {
		y    float64
		held bool
	}{{0.6, true}, {0.599, false}, {1 / 0.6, true}, {1.7, false}, {0, false}} {
		if got := !math.IsNaN(Horizontal95(1, c.y)); got != c.held {
			t.Errorf("RMSE 1 and %.3f: formula holds %v, want %v", c.y, got, c.held)
		}
	}
}

func TestAxisAgainstLibrary(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	for n := range 40 {
		d, squares := make([]float64, n), make([]float64, n)
		for i := range d {
			d[i] = 3 + r.NormFloat64()
			squares[i] = d[i] * d[i]
		}
		a := Along(d)
		mean, sd := stat.MeanStdDev(d, nil)
		rmse := math.Sqrt(stat.Mean(squares, nil))
		for _, c := range [][2]float64{{a.Mean, mean}, {a.SD, sd}, {a.RMSE, rmse}} {
			if math.Abs(c[0]-c[1]) > 1e-12 || math.IsNaN(c[0]) != (math.IsNaN(c[1]) || n == 0) {
				t.Errorf("%d differences: %v, want %v", n, c[0], c[1])
			}
		}
	}
}

// grid is that many points a side, a tenth of the side and more apart, with differences of a centimetre and more.
func grid(side int) (points []CheckPoint, area Area) {
	area.Max = [2]float64{100, 100}
	for i := range side * side {
		x, y := float64(i%side), float64(i/side)
		step := 100 / float64(side)
		points = append(points, CheckPoint{At: [3]float64{(x + 0.5) * step, (y + 0.5) * step}, Off: [3]float64{0.01 * math.Pow(-1, x), 0.012 * math.Pow(-1, y), math.NaN()}})
	}
	return points, area
}

func TestStatement(t *testing.T) {
	points, area := grid(6) // 16.7 m apart, the diagonal being 141 m
	a := Assure(points, area)
	want := "Tested 0.027 metres horizontal accuracy at 95% confidence level" // 2.4477 * 0.5 * 0.022
	if a.Horizontal.Text != want || !a.Horizontal.Claimed || a.Vertical.Text != "" || a.Vertical.Claimed || len(a.Remarks) != 0 {
		t.Errorf("horizontal %q, vertical %q, remarks %q; want %q alone", a.Horizontal.Text, a.Vertical.Text, a.Remarks, want)
	}
	for _, c := range []struct {
		what, says string
		change     func(p []CheckPoint) []CheckPoint
	}{
		{"a quadrant left out", "one quarter of the area holds 0 of 27", func(p []CheckPoint) (out []CheckPoint) {
			for _, p := range p {
				if p.At[0] < 50 || p.At[1] < 50 {
					out = append(out, p)
				}
			}
			return out
		}},
		{"two close together", "two of them are 5.000 m apart, at least 14.142 m", func(p []CheckPoint) []CheckPoint {
			p[7].At = p[8].At
			p[7].At[0] -= 5
			return p
		}},
		{"nineteen", "19 check points, at least 20", func(p []CheckPoint) []CheckPoint { return p[:19] }},
		{"one axis much worse", "less than 0.6 of the other (0.010 m and 0.120 m)", func(p []CheckPoint) []CheckPoint {
			for i := range p {
				p[i].Off[1] *= 10
			}
			return p
		}},
	} {
		points, area := grid(6)
		a := Assure(c.change(points), area)
		if a.Horizontal.Claimed || !strings.Contains(a.Horizontal.Text, c.says) {
			t.Errorf("%s: %q, want no claim and %q", c.what, a.Horizontal.Text, c.says)
		}
	}
}

// Twenty points may have one beyond the figure; a second is remarked on, and that there are fewer than thirty.
func TestTwentyPoints(t *testing.T) {
	for beyond := range 3 {
		points, area := grid(5)
		points = points[:20]
		for i := range points {
			points[i].At[1] = 25*float64(i/5) + 12.5 // four rows over the whole area
			if i < beyond {
				points[i].Off[0], points[i].Off[1] = 0.05, -0.05
			}
		}
		a := Assure(points, area)
		if !a.Horizontal.Claimed || a.Horizontal.Beyond != beyond {
			t.Errorf("%d beyond: %d counted, %q", beyond, a.Horizontal.Beyond, a.Horizontal.Text)
		}
		text := strings.Join(a.Remarks, " ")
		if strings.Contains(text, "lie beyond") != (beyond > 1) || !strings.Contains(text, "at least 30 check points; there are 20") {
			t.Errorf("%d beyond: %q", beyond, text)
		}
	}
}
