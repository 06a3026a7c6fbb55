package reliability

import (
	"fmt"
	"math"
	"strconv"
	"strings"
)

// CheckPoint is what was found at a point that took no part in the adjustment.
type CheckPoint struct {
	At  [3]float64 // where it lies in the map, m
	Off [3]float64 // adjusted minus surveyed, m; NaN for a coordinate that was not surveyed
}

// Accuracy is what check points say of the positions of a map, by the National Standard for Spatial Data Accuracy,
// FGDC-STD-007.3-1998. Figures that do not exist are NaN.
type Accuracy struct {
	X, Y, Z    Axis
	RMSER      float64 // radial, in the plane of x and y
	Horizontal Statement
	Vertical   Statement
	Remarks    []string // whole sentences
}

// Axis sums up the differences along one axis, m.
type Axis struct {
	N    int
	Mean float64
	SD   float64 // of the sample, about its mean
	RMSE float64 // about zero
}

// Statement is one line of an accuracy report.
type Statement struct {
	M         float64   // accuracy at 95 % confidence, m; NaN where the formula of the standard does not hold
	Claimed   bool      // the standard lets the figure be stated
	Text      string    // the standard's own words, or that nothing is claimed and why; empty without any check point
	Beyond    int       // check points further off than M
	Placement Placement // of the check points
}

// Placement is how check points lie over the area of a map.
type Placement struct {
	Points    int
	Quadrants [4]int  // points by quarter of the area: low x and low y, high x and low y, low x and high y, high x and high y
	Spacing   float64 // smallest distance of two points, m; NaN below two
	Diagonal  float64 // of the area, m
}

// Area is the upright rectangle that a map covers, m.
type Area struct{ Min, Max [2]float64 }

// What the standard asks for: the number of check points (3.2.2), their distribution over an area of uniform accuracy (appendix 3-C)
// and, for its approximation of the circular error, the smaller over the larger RMSE (appendix 3-A).
const (
	leastPoints   = 20
	leastQuadrant = 0.20 // of the points
	leastSpacing  = 0.10 // of the diagonal
	leastRatio    = 0.6
)

// advisedPoints is the least number in the ASPRS Positional Accuracy Standards for Digital Geospatial Data, edition 2, 2023.
const advisedPoints = 30

// biased is the share of the RMSE from which a mean hints at a bias: 25 to 50 % in 'Map Accuracy', Photogrammetric Engineering and
// Remote Sensing, May 2014, p. 397. Of twenty points without bias the root mean square of that share is 22 %.
const biased = 0.5

// Horizontal95 returns the horizontal accuracy at 95 % confidence from the RMSE along two axes (appendix 3-A): NaN where one is so much
// smaller than the other that the approximation does not hold.
func Horizontal95(x, y float64) float64 {
	switch {
	case x == y:
		return 1.7308 * math.Hypot(x, y)
	case min(x, y) >= leastRatio*max(x, y):
		return 2.4477 * 0.5 * (x + y)
	}
	return math.NaN()
}

// Vertical95 returns the vertical accuracy at 95 % confidence.
func Vertical95(z float64) float64 { return 1.9600 * z }

// Along sums up differences along one axis.
func Along(d []float64) Axis {
	a := Axis{N: len(d), Mean: math.NaN(), SD: math.NaN(), RMSE: math.NaN()}
	n := float64(len(d))
	if n == 0 {
		return a
	}
	sum, squares, about := 0.0, 0.0, 0.0
	for _, x := range d {
		sum += x
		squares += x * x
	}
	a.Mean, a.RMSE = sum/n, math.Sqrt(squares/n)
	if n > 1 {
		for _, x := range d {
			about += (x - a.Mean) * (x - a.Mean)
		}
		a.SD = math.Sqrt(about / (n - 1))
	}
	return a
}

// Place tells how points lie over an area. A point on a middle line counts on the side of the larger coordinate.
func Place(points [][2]float64, area Area) Placement {
	p := Placement{Points: len(points), Spacing: math.NaN(), Diagonal: math.Hypot(area.Max[0]-area.Min[0], area.Max[1]-area.Min[1])}
	for i, a := range points {
		quadrant := 0
		for c := range a {
			if a[c] >= (area.Min[c]+area.Max[c])/2 {
				quadrant += c + 1
			}
		}
		p.Quadrants[quadrant]++
		for _, b := range points[:i] {
			if d := math.Hypot(a[0]-b[0], a[1]-b[1]); !(d >= p.Spacing) {
				p.Spacing = d
			}
		}
	}
	return p
}

// Short says what the standard misses in the number and the distribution of the points, nothing when it is met.
func (p *Placement) Short() (why []string) {
	if p.Points < leastPoints {
		why = append(why, fmt.Sprintf("%d check points, at least %d are needed", p.Points, leastPoints))
	}
	if few := min(p.Quadrants[0], p.Quadrants[1], p.Quadrants[2], p.Quadrants[3]); float64(few) < leastQuadrant*float64(p.Points) {
		why = append(why, fmt.Sprintf("one quarter of the area holds %d of %d, at least %.0f %% are needed in each", few, p.Points, 100*leastQuadrant))
	}
	if p.Spacing < leastSpacing*p.Diagonal {
		why = append(why, fmt.Sprintf("two of them are %s m apart, at least %s m are needed (%.0f %% of the diagonal)", digits(p.Spacing), digits(leastSpacing*p.Diagonal), 100*leastSpacing))
	}
	return why
}

// Assure tests the positions of a map over an area at check points.
func Assure(points []CheckPoint, area Area) Accuracy {
	var x, y, z []float64
	var flat, high [][2]float64
	for i := range points {
		p := &points[i]
		at := [2]float64{p.At[0], p.At[1]}
		if !math.IsNaN(p.Off[0]) && !math.IsNaN(p.Off[1]) {
			x, y, flat = append(x, p.Off[0]), append(y, p.Off[1]), append(flat, at)
		}
		if !math.IsNaN(p.Off[2]) {
			z, high = append(z, p.Off[2]), append(high, at)
		}
	}
	a := Accuracy{X: Along(x), Y: Along(y), Z: Along(z)}
	a.RMSER = math.Hypot(a.X.RMSE, a.Y.RMSE)

	h := Statement{M: Horizontal95(a.X.RMSE, a.Y.RMSE), Placement: Place(flat, area)}
	var why []string
	if math.IsNaN(h.M) {
		why = []string{fmt.Sprintf("its formula does not hold where one RMSE is less than %g of the other (%s m and %s m)", leastRatio, digits(a.X.RMSE), digits(a.Y.RMSE))}
	}
	for i := range x {
		if math.Hypot(x[i], y[i]) > h.M {
			h.Beyond++
		}
	}
	h.state("horizontal", why)

	v := Statement{M: Vertical95(a.Z.RMSE), Placement: Place(high, area)}
	for i := range z {
		if math.Abs(z[i]) > v.M {
			v.Beyond++
		}
	}
	v.state("vertical", nil)
	a.Horizontal, a.Vertical = h, v
	a.remark()
	return a
}

// state words the statement; why has reasons against a claim that are not in the placement.
func (s *Statement) state(direction string, why []string) {
	if s.Placement.Points == 0 {
		return
	}
	why = append(s.Placement.Short(), why...)
	s.Claimed = len(why) == 0
	if s.Claimed {
		s.Text = fmt.Sprintf("Tested %s metres %s accuracy at 95%% confidence level", digits(s.M), direction)
		return
	}
	s.Text = fmt.Sprintf("No %s accuracy is claimed by FGDC-STD-007.3-1998: %s", direction, strings.Join(why, "; "))
}

// remark adds what a reader of the statements should know beside them.
func (a *Accuracy) remark() {
	for _, s := range []struct {
		*Statement
		name string
	}{{&a.Horizontal, "horizontal"}, {&a.Vertical, "vertical"}} {
		n := s.Placement.Points
		if allowed := n / 20; n >= leastPoints && s.Beyond > allowed {
			a.Remarks = append(a.Remarks, fmt.Sprintf("%d of %d check points lie beyond the %s figure, where 95 %% allows %d: the differences are not spread as the figure assumes.", s.Beyond, n, s.name, allowed))
		}
	}
	if n := max(a.Horizontal.Placement.Points, a.Vertical.Placement.Points); n >= leastPoints && n < advisedPoints {
		a.Remarks = append(a.Remarks, fmt.Sprintf("ASPRS edition 2 (2023) asks for at least %d check points; there are %d.", advisedPoints, n))
	}
	for _, c := range []struct {
		Axis
		name string
	}{{a.X, "x"}, {a.Y, "y"}, {a.Z, "z"}} {
		if c.N > 1 && math.Abs(c.Mean) > biased*c.RMSE {
			a.Remarks = append(a.Remarks, fmt.Sprintf("The mean along %s is %.0f %% of the RMSE: that hints at a bias.", c.name, 100*math.Abs(c.Mean)/c.RMSE))
		}
	}
}

// digits writes metres to the millimetre, smaller ones with two digits.
func digits(m float64) string {
	if math.Abs(m) >= 0.0095 || m == 0 {
		return strconv.FormatFloat(m, 'f', 3, 64)
	}
	return strconv.FormatFloat(m, 'g', 2, 64)
}
