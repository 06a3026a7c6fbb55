package report

import (
	"fmt"
	"math"
	"sort"
	"strconv"
	"strings"
)

// ChartGroup is a set of small charts side by side. Charts of a group that
// share the label of an axis share its scale, so that they can be compared.
type ChartGroup struct {
	Title  string
	Note   string // shown beneath, may be empty
	Charts []Chart
}

// Chart is one small line chart. Its lines carry their names at their right
// end; there is no legend.
type Chart struct {
	Title          string
	XLabel, YLabel string // what is plotted, with its unit: "time (s)"
	Series         []Series
	Threshold      *float64 // in the unit of Y; nil for none
	ThresholdLabel string
	LogY           bool // values that are not positive then break the line
}

// Series is one line of a chart.
type Series struct {
	Label string    // at the end of the line; empty where the title says it all
	Hue   int       // as in Track; 0 is ink
	X, Y  []float64 // of one length; X ascending and finite; a Y that is no finite number breaks the line
}

const (
	chartWidth  = 410.0 // px
	chartHeight = 210.0 // px, more where there are many lines to name
	letter      = 12.0  // px, height of letters in drawings
	labelApart  = 13.0  // px, between the names of two lines
)

func (c Chart) check() error {
	for _, s := range c.Series {
		if len(s.X) != len(s.Y) {
			return fmt.Errorf("report: chart %q, series %q: X has %d values and Y %d, expected as many", c.Title, s.Label, len(s.X), len(s.Y))
		}
		if s.Hue < 0 {
			return fmt.Errorf("report: chart %q, series %q: hue %d, expected 0 or more", c.Title, s.Label, s.Hue)
		}
		for i, x := range s.X {
			if math.IsNaN(x) || math.IsInf(x, 0) || i > 0 && x < s.X[i-1] {
				return fmt.Errorf("report: chart %q, series %q: X[%d] is %v, expected finite values in ascending order", c.Title, s.Label, i, x)
			}
		}
	}
	return nil
}

func (d *doc) charts(g ChartGroup) {
	id := d.id()
	d.raw("<figure class=\"charts\" aria-labelledby=\"" + id + "\">\n<figcaption id=\"" + id + "\">")
	d.text(g.Title)
	d.raw("</figcaption>\n<div class=\"multiples\">\n")
	xs, ys := make([]span, len(g.Charts)), make([]span, len(g.Charts))
	for i, c := range g.Charts {
		xs[i], ys[i] = c.extent()
	}
	for i, c := range g.Charts {
		x, y := xs[i], ys[i]
		for j, o := range g.Charts {
			if o.XLabel == c.XLabel {
				x.join(xs[j])
			}
			if o.YLabel == c.YLabel && o.LogY == c.LogY {
				y.join(ys[j])
			}
		}
		d.chart(c, x, y)
	}
	d.raw("</div>\n")
	if g.Note != "" {
		d.raw("<p class=\"note\">")
		d.text(g.Note)
		d.raw("</p>\n")
	}
	d.raw("</figure>\n")
}

// value is y on the axis as drawn: itself, or its logarithm.
func (c Chart) value(y float64) float64 {
	if !c.LogY {
		return y
	}
	if y <= 0 {
		return math.NaN()
	}
	return math.Log10(y)
}

// extent is the range of the chart's own data on both axes, as drawn.
func (c Chart) extent() (xs, ys span) {
	xs, ys = emptySpan(), emptySpan()
	for _, s := range c.Series {
		for i, x := range s.X {
			xs.add(x)
			ys.add(c.value(s.Y[i]))
		}
	}
	if c.Threshold != nil {
		ys.add(c.value(*c.Threshold))
	}
	return xs, ys
}

// axis is the vertical scale of a chart.
type axis struct {
	span
	at   []float64 // where the ticks stand
	text []string
}

// yAxis rounds the range of a chart outwards to whole ticks.
func (c Chart) yAxis(ys span) axis {
	if ys.empty() {
		ys = span{0, 1}
	}
	a := axis{span: ys}
	if c.LogY {
		a.lo, a.hi = math.Floor(ys.lo+1e-9), math.Ceil(ys.hi-1e-9)
		if a.lo == a.hi {
			a.hi++
		}
		step := max(1, math.Ceil(a.size()/6))
		for _, e := range ticks(a.span, step) {
			a.at = append(a.at, e)
			if e >= -3 && e <= 4 {
				a.text = append(a.text, strconv.FormatFloat(math.Pow(10, e), 'f', int(max(0, -e)), 64))
			} else {
				a.text = append(a.text, "1e"+strconv.Itoa(int(e)))
			}
		}
		return a
	}
	// A scale of amounts begins at nothing, unless the data are far from it.
	if ys.lo > 0 && ys.lo < ys.hi*0.6 {
		a.lo = 0
	}
	if a.lo == a.hi {
		pad := max(1, math.Abs(a.lo)) / 2
		a.lo, a.hi = a.lo-pad, a.hi+pad
	}
	step := niceStep(a.size() / 5)
	a.lo, a.hi = math.Floor(a.lo/step+1e-9)*step, math.Ceil(a.hi/step-1e-9)*step
	for _, v := range ticks(a.span, step) {
		a.at = append(a.at, v)
		a.text = append(a.text, tickText(v, step))
	}
	return a
}

func (d *doc) chart(c Chart, xs, ys span) {
	if xs.empty() {
		xs = span{0, 1}
	}
	if xs.lo == xs.hi {
		xs.hi = xs.lo + 1
	}
	a := c.yAxis(ys)
	left, rightEdge, named := 14.0, 12.0, 0.0
	for _, t := range a.text {
		left = max(left, textWidth(t, letter)+10)
	}
	for _, s := range c.Series {
		if s.Label == "" {
			continue
		}
		named++
		rightEdge = max(rightEdge, min(110, textWidth(shorten(s.Label, 18), letter)+16))
	}
	height := max(chartHeight, 78+labelApart*named)
	f := box{left, 42, chartWidth - rightEdge, height - 36}
	px := func(x, y float64) point {
		return point{f.x0 + (x-xs.lo)/xs.size()*f.w(), f.y1 - (y-a.lo)/a.size()*f.h()}
	}

	id := d.id()
	d.svg(id, chartWidth, height, "", c.Title, c.describe())
	d.letters(0, 13, "b", "start", shorten(c.Title, 48))
	d.letters(0, 30, "soft", "start", shorten(c.YLabel, 60))
	for i, v := range a.at {
		y := px(xs.lo, v)[1]
		d.line(f.x0, y, f.x1, y, "rule")
		d.letters(f.x0-6, y+4, "soft", "end", a.text[i])
	}
	step := niceStep(xs.size() / max(2, math.Floor(f.w()/70)))
	for _, v := range ticks(xs, step) {
		x := px(v, a.lo)[0]
		d.line(x, f.y1, x, f.y1+4, "fine")
		d.letters(x, f.y1+16, "soft", "middle", tickText(v, step))
	}
	d.line(f.x0, f.y1, f.x1, f.y1, "fine")
	d.letters(f.x1, f.y1+31, "soft", "end", shorten(c.XLabel, 50))
	if c.Threshold != nil {
		if v := c.value(*c.Threshold); v >= a.lo && v <= a.hi {
			y := px(xs.lo, v)[1]
			d.line(f.x0, y, f.x1, y, "limit")
		}
	}
	pen := newPlacer(box{0, 0, chartWidth, height})
	var ends []endLabel
	for _, s := range c.Series {
		var pts []point
		for i, x := range s.X {
			pts = append(pts, px(x, c.value(s.Y[i])))
		}
		hue := s.Hue
		if len(c.Series) == 1 {
			hue %= hues // alone, it needs no dashes
		}
		for _, run := range runs(pts) {
			run = simplify(columns(run), d.tol)
			d.polyline(run, hue, 1.5)
			pen.ink(run)
		}
		if end, ok := lastFinite(pts); ok && s.Label != "" {
			ends = append(ends, endLabel{shorten(s.Label, 18), end, end[1]})
		}
	}
	d.endLabels(ends, f)
	d.threshold(c, f, px, pen)
	d.raw("</svg>\n")
}

// threshold names the threshold where its name covers least of the lines.
func (d *doc) threshold(c Chart, f box, px func(x, y float64) point, pen *placer) {
	if c.Threshold == nil || c.ThresholdLabel == "" {
		return
	}
	y := px(0, c.value(*c.Threshold))[1]
	if !(y >= f.y0-1 && y <= f.y1+1) {
		return
	}
	s := shorten(c.ThresholdLabel, 40)
	w := textWidth(s, letter)
	best, at := math.Inf(1), box{}
	for _, top := range [...]float64{y - 16, y + 2} {
		for _, x := range [...]float64{f.x0 + 4, f.x1 - w - 4, (f.x0 + f.x1 - w) / 2} {
			b := box{x, top, x + w, top + 14}
			if cost := pen.cost(b); b.y1 <= f.y1 && cost < best {
				best, at = cost, b
			}
		}
	}
	if at.w() > 0 {
		d.letters(at.x0, at.y0+11, "halo i", "start", s)
	}
}

// endLabel names a line at its last point; y is where the name goes in the end.
type endLabel struct {
	text string
	at   point
	y    float64
}

// endLabels sets the names of the lines to the right of the frame, moved apart
// as far as they need and joined to their lines by a hair.
func (d *doc) endLabels(ends []endLabel, f box) {
	sort.SliceStable(ends, func(i, j int) bool { return ends[i].at[1] < ends[j].at[1] })
	// Down from the top, then up from the bottom where that ran out of the frame.
	floor := f.y0 - 6
	for i := range ends {
		ends[i].y = max(ends[i].y, floor)
		floor = ends[i].y + labelApart
	}
	ceil := f.y1 + 6
	for i := len(ends) - 1; i >= 0; i-- {
		ends[i].y = min(ends[i].y, ceil)
		ceil = ends[i].y - labelApart
	}
	for _, e := range ends {
		d.line(e.at[0]+1, e.at[1], f.x1+7, e.y, "hair")
		d.letters(f.x1+10, e.y+4, "", "start", e.text)
	}
}

// describe says in words what the chart shows.
func (c Chart) describe() string {
	var b strings.Builder
	b.WriteString(c.YLabel + " against " + c.XLabel + ".")
	for _, s := range c.Series {
		if s.Label == "" {
			s.Label = c.Title
		}
		r, last := emptySpan(), math.NaN()
		for _, y := range s.Y {
			r.add(y)
			if !math.IsNaN(y) && !math.IsInf(y, 0) {
				last = y
			}
		}
		if r.empty() {
			fmt.Fprintf(&b, " %s: no values.", s.Label)
			continue
		}
		fmt.Fprintf(&b, " %s: from %.3g to %.3g, last %.3g.", s.Label, r.lo, r.hi, last)
	}
	if c.Threshold != nil {
		fmt.Fprintf(&b, " Threshold %s: %.3g.", c.ThresholdLabel, *c.Threshold)
	}
	return b.String()
}
