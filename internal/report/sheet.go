package report

import (
	"math"
	"strconv"
	"strings"
)

// view maps metres to px; a profile has two scales, a plan one.
type view struct {
	frame  box
	x0, y0 float64 // m, at the lower left corner of the frame
	sx, sy float64 // px per m
	zoom   float64 // of symbols and line widths: less than 1 on a phone
}

func (v view) px(x, y float64) point {
	return point{v.frame.x0 + (x-v.x0)*v.sx, v.frame.y1 - (y-v.y0)*v.sy}
}

func (v view) line(pts [][3]float64) []point {
	out := make([]point, len(pts))
	for i, p := range pts {
		out[i] = v.px(p[0], p[1])
	}
	return out
}

// bounds is the extent of all that is drawn, along one axis.
func (p Plan) bounds(axis int) span {
	s := emptySpan()
	for _, t := range p.Tracks {
		for _, q := range t.Points {
			s.add(q[axis])
		}
		for _, q := range t.Truth {
			s.add(q[axis])
		}
	}
	for _, t := range p.Ties {
		s.add(t.From[axis])
		s.add(t.To[axis])
	}
	for _, e := range p.Ellipses {
		if axis < 2 {
			s.add(e.At[axis])
		}
	}
	if s.empty() {
		return span{0, 1}
	}
	return s
}

// layout chooses the scale and the frame of a plan of the given width in px.
func (p Plan) layout(width float64) (view, float64) {
	const top, right = 8.0, 10.0
	pad := 14 + width/40
	xs, ys := p.bounds(0), p.bounds(1)
	dx, dy := max(xs.size(), 1e-3), max(ys.size(), 1e-3)
	if dx < 1 && dy < 1 { // a robot that stood still
		dx = 1
	}
	tallest, zoom := width*0.8, 1.0
	if width < 400 {
		tallest, zoom = width*1.15, 0.75
	}
	left := 40.0
	var scale, step float64
	for range 2 { // the margin depends on the ticks, and they on the scale
		scale = min((width-left-right-2*pad)/dx, (tallest-2*pad)/dy)
		step = niceStep(spacing(width) / scale)
		left = 12
		for _, v := range ticks(span{ys.lo - step, ys.hi + step}, step) {
			left = max(left, textWidth(tickText(v, step), letter)+11)
		}
	}
	w := width - left - right
	// A tall site leaves room at its sides; keep some of it for labels.
	w = min(w, max(dx*scale+2*pad+width*0.2, width*0.62-left-right))
	least := width * 0.3
	if width < 400 {
		least = width * 0.9 // labels do not shrink with the site: give them room
	}
	h := max(dy*scale+2*pad, least)
	f := box{left, top, left + w, top + h}
	return view{
		frame: f, sx: scale, sy: scale, zoom: zoom,
		x0: (xs.lo+xs.hi)/2 - w/2/scale,
		y0: (ys.lo+ys.hi)/2 - h/2/scale,
	}, step
}

// spacing is the least distance of grid ticks in px.
func spacing(width float64) float64 { return max(56, width/9) }

// sheet draws the plan at one width.
func (d *doc) sheet(p Plan, width float64, class string, mag float64) {
	v, step := p.layout(width)
	f := v.frame
	notes := []string{"Grid every " + tickText(step, step) + " m."}
	if len(p.Ellipses) > 0 {
		notes = append(notes, p.ellipseNote(mag)+".")
	}
	if width > 500 {
		notes = []string{strings.Join(notes, " ")}
	}
	height := f.y1 + 70 + 17*float64(len(notes))
	id := d.id()
	d.svg(id, f.x1+10, height, class, "Plan view of "+p.Title, p.describe())
	d.grid(v, step, step)
	d.raw("<svg")
	d.attr("x", f.x0)
	d.attr("y", f.y0)
	d.attr("width", f.w())
	d.attr("height", f.h())
	d.raw(" viewBox=\"" + num(f.x0) + " " + num(f.y0) + " " + num(f.w()) + " " + num(f.h()) + "\">\n")
	pen := newPlacer(box{f.x0 + 2, f.y0 + 2, f.x1 - 2, f.y1 - 2})
	d.tracks(p.Tracks, v.line, v.zoom, pen)
	for _, e := range p.Ellipses {
		d.ellipse(v, e, mag)
	}
	d.ties(v, p.Ties, pen)
	d.names(p.Tracks, v.line, true, v.zoom, pen)
	d.tieNames(v, p.Ties, width, pen)
	d.raw("</svg>\n")
	d.frame(f)
	d.scaleBar(v, width)
	d.axes(p, v)
	for i, n := range notes {
		d.letters(f.x0, f.y1+78+17*float64(i), "i", "start", n)
	}
	d.raw("</svg>\n")
}

// tracks draws the tracks over the truth. Robots drive over each other's
// tracks: the first are drawn widest, so that the later ones do not hide them.
func (d *doc) tracks(tracks []Track, line func([][3]float64) []point, zoom float64, pen *placer) {
	for _, t := range tracks {
		for _, run := range runs(line(t.Truth)) {
			d.raw("<path class=\"truth\" d=\"")
			d.path(simplify(run, d.tol))
			d.raw("\"/>\n")
		}
	}
	for i, t := range tracks {
		width := zoom * (1.4 + 2*(1-float64(i+1)/float64(len(tracks))))
		for _, run := range runs(line(t.Points)) {
			run = simplify(run, d.tol)
			d.polyline(run, t.Hue, width)
			pen.ink(run)
		}
		d.raw("\n")
	}
}

func (d *doc) frame(f box) {
	d.raw("<path class=\"frame\" d=\"M" + num(f.x0) + " " + num(f.y0) + "H" + num(f.x1) + "V" + num(f.y1) + "H" + num(f.x0) + "Z\"/>\n")
}

// grid draws ticks with coordinates on the lower and left edge, small crosses
// where the grid lines meet, and ticks on the edges opposite.
func (d *doc) grid(v view, stepX, stepY float64) {
	f := v.frame
	xs := ticks(span{v.x0, v.x0 + f.w()/v.sx}, stepX)
	ys := ticks(span{v.y0, v.y0 + f.h()/v.sy}, stepY)
	d.raw("<path class=\"grid\" d=\"")
	for _, x := range xs {
		for _, y := range ys {
			q := v.px(x, y)
			if q[0] > f.x0+6 && q[0] < f.x1-6 && q[1] > f.y0+6 && q[1] < f.y1-6 {
				d.raw("M" + num(q[0]-3.5) + " " + num(q[1]) + "h7m-3.5-3.5v7")
			}
		}
	}
	d.raw("\"/>\n<path class=\"fine\" d=\"")
	for _, x := range xs {
		q := v.px(x, v.y0)[0]
		d.raw("M" + num(q) + " " + num(f.y1) + "v5M" + num(q) + " " + num(f.y0) + "v5")
	}
	for _, y := range ys {
		q := v.px(v.x0, y)[1]
		d.raw("M" + num(f.x0) + " " + num(q) + "h-5M" + num(f.x1) + " " + num(q) + "h-5")
	}
	d.raw("\"/>\n")
	for _, x := range xs {
		s := tickText(x, stepX)
		if q := v.px(x, v.y0)[0]; q+textWidth(s, letter)/2 < f.x1+9 && q-textWidth(s, letter)/2 > 0 {
			d.letters(q, f.y1+18, "soft", "middle", s)
		}
	}
	for _, y := range ys {
		if q := v.px(v.x0, y)[1]; q > f.y0+2 && q < f.y1+2 {
			d.letters(f.x0-8, q+4, "soft", "end", tickText(y, stepY))
		}
	}
	d.raw("\n")
}

// scaleBar stands beneath the frame at its left.
func (d *doc) scaleBar(v view, width float64) {
	f := v.frame
	unit := niceStep(max(34, width/14) / v.sx) // m
	x, y, w := f.x0, f.y1+38, unit*v.sx/2
	d.raw("<path class=\"bar\" d=\"M" + num(x) + " " + num(y) + "h" + num(4*w) + "v6h" + num(-4*w) + "z\"/>")
	d.raw("<path class=\"fill\" d=\"M" + num(x) + " " + num(y) + "h" + num(w) + "v6h" + num(-w) + "zm" + num(2*w) + " 0h" + num(w) + "v6h" + num(-w) + "z\"/>\n")
	for k, anchor := range [...]string{"start", "middle", "middle"} {
		s := tickText(float64(k)*unit, unit)
		if k == 2 {
			s += " m"
		}
		d.letters(x+float64(2*k)*w, y+20, "", anchor, s)
	}
}

// axes draws the arrow of the datum's x axis, and north if the datum is tied to
// it, beneath the frame at its right.
func (d *doc) axes(p Plan, v view) {
	f := v.frame
	x, y := f.x1-58, f.y1+52
	d.line(x, y, x+38, y, "ink")
	d.raw("<path class=\"fill\" d=\"M" + num(x+46) + " " + num(y) + "l-10-3.5v7z\"/>")
	d.letters(x+50, y+4, "i", "start", "x")
	if p.DatumTiedToNorth && (len(p.Tracks) == 0 || p.Tracks[0].Island == 0) {
		d.line(x, y, x, y-18, "ink")
		d.raw("<path class=\"fill\" d=\"M" + num(x) + " " + num(y-26) + "l-3.5 10h7z\"/>")
		d.letters(x+8, y-14, "b", "start", "N")
	}
	s := "datum"
	if len(p.Tracks) > 0 && p.Tracks[0].Island != 0 {
		s = "own frame"
	}
	d.letters(x-8, y+4, "soft", "end", s)
}

// ellipse draws one 95 % ellipse, mag times too large.
func (d *doc) ellipse(v view, e Ellipse, mag float64) {
	q := v.px(e.At[0], e.At[1])
	if !q.finite() {
		return
	}
	major, minor, angle := axesOf(e.Cov)
	d.raw("<ellipse class=\"ellipse\" rx=\"" + num(major*mag*v.sx) + "\" ry=\"" + num(minor*mag*v.sx) +
		"\" transform=\"translate(" + num(q[0]) + " " + num(q[1]) + ") rotate(" + num(-angle*180/math.Pi) + ")\"/>\n")
}

// axesOf are the half axes in m of the 95 % ellipse of a covariance, and the
// angle of the major one from x in radians, anticlockwise. 5.991 is the 95 %
// point of the chi-squared distribution with two degrees of freedom.
func axesOf(cov [3]float64) (major, minor, angle float64) {
	mean, half := (cov[0]+cov[2])/2, (cov[0]-cov[2])/2
	r := math.Hypot(half, cov[1])
	return math.Sqrt(5.991 * (mean + r)), math.Sqrt(5.991 * max(0, mean-r)), math.Atan2(cov[1], half) / 2
}

// magnification is what the plan asks for, or what makes the largest ellipse
// about 30 px long on a desk, to the next 1, 2 or 5 times a power of ten below.
func (p Plan) magnification() float64 {
	if p.EllipseMagnification > 0 || len(p.Ellipses) == 0 {
		return max(p.EllipseMagnification, math.SmallestNonzeroFloat64)
	}
	largest := 0.0
	for _, e := range p.Ellipses {
		major, _, _ := axesOf(e.Cov)
		largest = max(largest, major)
	}
	v, _ := p.layout(deskWidth)
	return max(1, niceStep(30/(largest*v.sx)/2.5))
}

// describe says in words what the plan shows.
func (p Plan) describe() string {
	var held, refused, open int
	for _, t := range p.Ties {
		switch t.Verdict {
		case Held:
			held++
		case Refused:
			refused++
		default:
			open++
		}
	}
	xs, ys := p.bounds(0), p.bounds(1)
	var b strings.Builder
	b.WriteString("Tracks of " + p.robots() + ", over " + tickText(xs.size(), 1) + " by " + tickText(ys.size(), 1) + " metres. Ties: " +
		strconv.Itoa(held) + " held, " + strconv.Itoa(refused) + " refused, " + strconv.Itoa(open) + " open. The figures stand in the tables.")
	return b.String()
}
