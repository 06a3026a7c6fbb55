package report

import (
	"math"
	"strconv"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

// No point of the given line is further from the simplified one than the
// tolerance, by brute force over all its pieces.
func TestSimplifyStaysWithinTolerance(t *testing.T) {
	coord := rapid.Float64Range(-40, 40)
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(0, 120).Draw(t, "n")
		step := rapid.SampledFrom([]float64{0.02, 0.3, 5}).Draw(t, "step")
		pts := make([]point, n)
		var at point
		for i := range pts {
			at = point{at[0] + step*coord.Draw(t, "dx")/40, at[1] + step*coord.Draw(t, "dy")/40}
			pts[i] = at
		}
		given := append([]point(nil), pts...)
		tol := rapid.SampledFrom([]float64{0.1, 0.5, 4}).Draw(t, "tol")
		out := simplify(pts, tol)
		for i, p := range given {
			if pts[i] != p {
				t.Fatal("the given line was changed")
			}
			best := math.Inf(1)
			for k := 1; k < len(out); k++ {
				best = min(best, distance(p, out[k-1], out[k]))
			}
			if n > 1 && best > tol+1e-9 {
				t.Fatalf("point %d stands %v off, tolerance %v", i, best, tol)
			}
		}
		if n > 0 && (out[0] != given[0] || out[len(out)-1] != given[n-1]) {
			t.Fatal("an end was moved")
		}
	})
}

func TestSimplifyDropsWhatAStraightLineHolds(t *testing.T) {
	var pts []point
	for i := range 5001 {
		pts = append(pts, point{float64(i), 0.1 * math.Sin(float64(i))})
	}
	if out := simplify(pts, 0.5); len(out) > 5 {
		t.Errorf("%d points kept of a straight line, expected one for every stretch", len(out))
	}
}

func TestColumnsKeepThePeaks(t *testing.T) {
	var pts []point
	for i := range 10_000 {
		pts = append(pts, point{float64(i) / 100, math.Sin(float64(i * i))})
	}
	pts[4321][1], pts[8765][1] = 9, -9
	out := columns(pts)
	if len(out) > 4*100 {
		t.Errorf("%d points in 100 columns", len(out))
	}
	lo, hi := math.Inf(1), math.Inf(-1)
	for i, p := range out {
		lo, hi = min(lo, p[1]), max(hi, p[1])
		if i > 0 && p[0] <= out[i-1][0] {
			t.Fatal("order lost")
		}
	}
	if lo != -9 || hi != 9 || out[0] != pts[0] || out[len(out)-1] != pts[len(pts)-1] {
		t.Errorf("range %v to %v, expected -9 to 9 and both ends", lo, hi)
	}
}

// Path data read back gives the points to a tenth of a pixel, however long the
// line: rounding does not add up.
func TestPathReadsBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		pts := make([]point, rapid.IntRange(1, 50).Draw(t, "n"))
		for i := range pts {
			pts[i] = point{rapid.Float64Range(-900, 900).Draw(t, "x"), rapid.Float64Range(-900, 900).Draw(t, "y")}
		}
		d := &doc{}
		d.path(pts)
		s := strings.NewReplacer("M", "", "l", " ", "-", " -").Replace(string(d.b))
		f := strings.Fields(s)
		if len(f) != 2*len(pts) {
			t.Fatalf("%d numbers for %d points in %q", len(f), len(pts), d.b)
		}
		x, y := 0.0, 0.0
		for i, p := range pts {
			dx, err1 := strconv.ParseFloat(f[2*i], 64)
			dy, err2 := strconv.ParseFloat(f[2*i+1], 64)
			if err1 != nil || err2 != nil {
				t.Fatalf("%q is no path", d.b)
			}
			x, y = x+dx, y+dy
			if math.Abs(x-p[0]) > 0.051 || math.Abs(y-p[1]) > 0.051 {
				t.Fatalf("point %d is drawn at %v, %v instead of %v", i, x, y, p)
			}
		}
	})
}

func TestScalesAreEqualAndHoldTheSite(t *testing.T) {
	coord := rapid.Float64Range(-5000, 5000)
	rapid.Check(t, func(t *rapid.T) {
		var pts [][3]float64
		for range rapid.IntRange(1, 20).Draw(t, "n") {
			pts = append(pts, [3]float64{coord.Draw(t, "x"), coord.Draw(t, "y") * rapid.SampledFrom([]float64{1, 0.01}).Draw(t, "flat"), 0})
		}
		p := Plan{Tracks: []Track{{Points: pts}}}
		for _, width := range []float64{deskWidth, phoneWidth, islandWidth} {
			v, step := p.layout(width)
			if v.sx != v.sy {
				t.Fatalf("scales %v and %v", v.sx, v.sy)
			}
			if v.frame.x1+10 > width+1e-6 || v.frame.y1 > 1.2*width {
				t.Fatalf("frame %v on a sheet %v wide", v.frame, width)
			}
			for _, q := range v.line(pts) {
				if q[0] < v.frame.x0 || q[0] > v.frame.x1 || q[1] < v.frame.y0 || q[1] > v.frame.y1 {
					t.Fatalf("%v lies outside of %v", q, v.frame)
				}
			}
			if step*v.sx < spacing(width)-1e-6 {
				t.Fatalf("grid ticks %v px apart", step*v.sx)
			}
		}
	})
}

// A 95 % ellipse has its half axes at 2.4477 sigma: the square root of the
// 95 % point of chi-squared with two degrees of freedom.
func TestEllipseAxes(t *testing.T) {
	major, minor, angle := axesOf([3]float64{1, 0, 4})
	if math.Abs(major-2*2.4477) > 1e-3 || math.Abs(minor-2.4477) > 1e-3 || math.Abs(math.Abs(angle)-math.Pi/2) > 1e-12 {
		t.Errorf("half axes %v and %v at %v", major, minor, angle)
	}
	// Turned by 30 degrees, the same axes.
	c, s := math.Cos(math.Pi/6), math.Sin(math.Pi/6)
	major, minor, angle = axesOf([3]float64{9*c*c + s*s, 8 * c * s, 9*s*s + c*c})
	if math.Abs(major-3*2.4477) > 1e-3 || math.Abs(minor-2.4477) > 1e-3 || math.Abs(angle-math.Pi/6) > 1e-12 {
		t.Errorf("half axes %v and %v at %v", major, minor, angle)
	}
}

func TestLabelsKeepClearOfEachOther(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		frame := box{0, 0, 600, 400}
		pen := newPlacer(frame)
		for range rapid.IntRange(1, 20).Draw(t, "n") {
			at := point{rapid.Float64Range(0, 600).Draw(t, "x"), rapid.Float64Range(0, 400).Draw(t, "y")}
			pen.place(at, 60, 14)
		}
		for i, a := range pen.taken {
			if !a.inside(frame) {
				t.Fatalf("label %v outside", a)
			}
			for _, b := range pen.taken[:i] {
				if a.meets(b) {
					t.Fatalf("labels %v and %v on each other", a, b)
				}
			}
		}
	})
}

// Robots on islands never appear in the plan of the datum.
func TestIslandsAreDrawnApart(t *testing.T) {
	p := drift(6, 200, 20, false)
	page, _ := set(t, p)
	_, after, _ := strings.Cut(string(page), `<div class="islands">`)
	before, _, _ := strings.Cut(string(page), `<div class="islands">`)
	_, plan, _ := strings.Cut(before, `<figure class="plan"`)
	if strings.Contains(plan, ">hare<") || !strings.Contains(plan, ">mole<") {
		t.Error("the plan of the datum names a robot that is not in it, or misses one that is")
	}
	after, _, _ = strings.Cut(after, `<section id="charts"`)
	if !strings.Contains(after, ">hare<") || strings.Contains(after, ">mole<") || !strings.Contains(after, "own frame") {
		t.Error("the island does not stand by itself")
	}
	if strings.Contains(after, ">N<") || !strings.Contains(plan, ">N<") {
		t.Error("north belongs to the datum, and to it alone")
	}
}
