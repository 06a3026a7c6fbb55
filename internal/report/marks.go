package report

import (
	"math"
	"strconv"
)

// symbols are the small forms of the plan, drawn once and referred to.
const symbols = `<svg xmlns="http://www.w3.org/2000/svg" class="store" aria-hidden="true" width="0" height="0">
<symbol id="start" overflow="visible"><circle class="mark" r="4"/></symbol>
<symbol id="newest" overflow="visible"><path class="fill" d="M6 0L-4-4.5V4.5Z"/></symbol>
<symbol id="end" overflow="visible"><circle class="end" r="2.2"/></symbol>
<symbol id="cross" overflow="visible"><path class="back" d="M-4.5-4.5L4.5 4.5M-4.5 4.5L4.5-4.5"/><path class="cross" d="M-4.5-4.5L4.5 4.5M-4.5 4.5L4.5-4.5"/></symbol>
<symbol id="ring" overflow="visible"><circle class="mark" r="4.5"/></symbol>
<symbol id="square" overflow="visible"><path class="mark" d="M-3.5-3.5h7v7h-7z"/></symbol>
<symbol id="diamond" overflow="visible"><path class="diamond" d="M0-9L9 0L0 9L-9 0Z"/></symbol>
</svg>
`

// ties draws the ties, those that matter most on top.
func (d *doc) ties(v view, ties []TieMark, pen *placer) {
	for _, verdict := range [...]string{Held, Open, Refused} {
		for _, t := range ties {
			if t.Verdict == verdict {
				d.tie(v, t, pen)
			}
		}
	}
}

func (d *doc) tie(v view, t TieMark, pen *placer) {
	a, b := v.px(t.From[0], t.From[1]), v.px(t.To[0], t.To[1])
	if !a.finite() || !b.finite() {
		return
	}
	ends := " d=\"M" + num(a[0]) + " " + num(a[1]) + "L" + num(b[0]) + " " + num(b[1]) + "\"/>"
	class, mark := "tie", ""
	switch {
	case t.Verdict == Refused:
		class, mark = "tie no", "cross"
	case t.Verdict == Open:
		class, mark = "tie may", "ring"
	case t.Unchecked:
		mark = "square"
	}
	d.raw("<g><title>")
	d.text("tie " + shorten(t.ID, 60) + ", " + t.Verdict)
	if t.SmallestDetectableM > 0 {
		d.text(", smallest detectable error " + strconv.FormatFloat(t.SmallestDetectableM, 'g', 2, 64) + " m")
	}
	d.raw("</title><path class=\"under\"" + ends + "<path class=\"" + class + "\"")
	if w := t.width() * v.zoom; w != 1 {
		d.raw(" style=\"stroke-width:" + num(w) + "\"")
	}
	d.raw(ends)
	d.use("end", a, v.zoom, 0)
	d.use("end", b, v.zoom, 0)
	pen.ink([]point{a, b})
	m := point{(a[0] + b[0]) / 2, (a[1] + b[1]) / 2}
	if t.contradicted() {
		d.use("diamond", m, v.zoom, 0)
		pen.blot(box{m[0] - 9, m[1] - 9, m[0] + 9, m[1] + 9})
	}
	if mark != "" {
		d.use(mark, m, v.zoom, 0)
		pen.blot(box{m[0] - 7, m[1] - 7, m[0] + 7, m[1] + 7})
	}
	d.raw("</g>\n")
}

// tieNames writes the ids of the ties a person will look for, if they are few.
func (d *doc) tieNames(v view, ties []TieMark, width float64, pen *placer) {
	var some []TieMark
	for _, t := range ties {
		if t.Verdict == Refused || t.contradicted() {
			some = append(some, t)
		}
	}
	if float64(len(some)) > width/50 {
		return
	}
	for _, t := range some {
		a, b := v.px(t.From[0], t.From[1]), v.px(t.To[0], t.To[1])
		m := point{(a[0] + b[0]) / 2, (a[1] + b[1]) / 2}
		if !m.finite() {
			continue
		}
		s := shorten(t.ID, 12)
		at := pen.place(m, textWidth(s, letter-1), 12)
		d.leader(m, at)
		d.letters(at.x0, at.y1-2.5, "halo small i", "start", s)
	}
}

// leader joins a label that stands away to what it names.
func (d *doc) leader(from point, to box) {
	n := to.nearest(from)
	if l := math.Hypot(n[0]-from[0], n[1]-from[1]); l > 17 {
		f := 6 / l
		d.line(from[0]+f*(n[0]-from[0]), from[1]+f*(n[1]-from[1]), n[0], n[1], "hair")
	}
}

// plate takes the colour out of what lies beneath a label.
func (d *doc) plate(b box) {
	d.raw("<path class=\"plate\" d=\"M" + num(b.x0-3) + " " + num(b.y0) + "h" + num(b.w()+6) + "v" + num(b.h()) + "h" + num(-b.w()-6) + "z\"/>")
}

// The lettering of the two sorts of label.
const (
	startClass  = "halo"
	newestClass = "halo b"
)

// label is the set of robots named at one place.
type label struct {
	at     point
	class  string
	tracks []Track
}

// names marks the start and the newest pose of every track and writes the
// robots beside the newest poses, and beside the starts if asked to. Tracks that
// start or end in one place share a label.
func (d *doc) names(tracks []Track, line func([][3]float64) []point, atStart bool, zoom float64, pen *placer) {
	var newest, starts []label
	gather := func(to *[]label, class string, at point, t Track) {
		pen.blot(box{at[0] - 6, at[1] - 6, at[0] + 6, at[1] + 6})
		for i := range *to {
			if l := &(*to)[i]; math.Hypot(l.at[0]-at[0], l.at[1]-at[1]) < 16 {
				l.tracks = append(l.tracks, t)
				return
			}
		}
		*to = append(*to, label{at, class, []Track{t}})
	}
	for _, t := range tracks {
		pts := line(t.Points)
		if a, ok := firstFinite(pts); ok {
			d.use("start", a, zoom, 0)
			if atStart {
				gather(&starts, startClass, a, t)
			}
		}
		if b, ok := lastFinite(pts); ok {
			d.use("newest", b, zoom, heading(pts))
			gather(&newest, newestClass, b, t)
		}
	}
	d.raw("\n")
	for _, l := range append(newest, starts...) {
		d.label(l, pen)
	}
}

// heading is the direction of the end of a line, in degrees as SVG turns.
func heading(pts []point) float64 {
	end, ok := lastFinite(pts)
	for i := len(pts) - 1; ok && i >= 0; i-- {
		if p := pts[i]; p.finite() && math.Hypot(end[0]-p[0], end[1]-p[1]) > 5 {
			return math.Atan2(end[1]-p[1], end[0]-p[0]) * 180 / math.Pi
		}
	}
	return 0
}

// label writes the robots of one place, each with a sample of its line, in
// columns of eight. Where more than eight start in one place only their number
// is written: a long list would hide the plan, and each is named at its newest
// pose.
func (d *doc) label(l label, pen *placer) {
	const rows, high, sample = 8, 14.0, 18.0
	if n := len(l.tracks); n > rows && l.class == startClass {
		s := strconv.Itoa(n) + " robots start here"
		at := pen.place(l.at, textWidth(s, letter), high)
		d.leader(l.at, at)
		d.plate(at)
		d.letters(at.x0, at.y1-3, l.class, "start", s)
		return
	}
	name := func(t Track) string { return shorten(t.Robot, 18) }
	wide := 0.0
	for _, t := range l.tracks {
		wide = max(wide, textWidth(name(t), letter))
	}
	wide += sample + 4
	cols := (len(l.tracks) + rows - 1) / rows
	at := pen.place(l.at, float64(cols)*(wide+6)-6, high*float64(min(rows, len(l.tracks))))
	d.leader(l.at, at)
	d.plate(at)
	for i, t := range l.tracks {
		x, y := at.x0+float64(i/rows)*(wide+6), at.y0+float64(i%rows)*high+high/2
		d.polyline([]point{{x, y}, {x + sample - 4, y}}, t.Hue, 2)
		d.letters(x+sample, y+4, l.class, "start", name(t))
	}
	d.raw("\n")
}
