package report

import (
	"math"
	"strconv"
	"strings"
	"unicode"
)

// doc is the growing file.
type doc struct {
	b   []byte
	tol float64 // px, how far a drawn line may stand from the true one
	ids int     // element ids given out
}

// raw appends mark-up of our own.
func (d *doc) raw(s string) { d.b = append(d.b, s...) }

// text appends words from outside, escaped for element content and attributes.
func (d *doc) text(s string) {
	for _, r := range clean(s) {
		switch r {
		case '&':
			d.raw("&amp;")
		case '<':
			d.raw("&lt;")
		case '>':
			d.raw("&gt;")
		case '"':
			d.raw("&#34;")
		case '\'':
			d.raw("&#39;")
		default:
			d.b = append(d.b, string(r)...)
		}
	}
}

// attr appends ` name="value"` for a number in pixels.
func (d *doc) attr(name string, v float64) {
	d.raw(" " + name + "=\"" + num(v) + "\"")
}

// id gives out a fresh element id.
func (d *doc) id() string {
	d.ids++
	return "e" + strconv.Itoa(d.ids)
}

// clean replaces what must not reach a page or a terminal: control characters,
// invisible format characters (among them those that change the direction of
// writing), and what is not a character at all. Line breaks and tabs become
// blanks.
func clean(s string) string {
	return strings.Map(func(r rune) rune {
		switch {
		case r == '\n' || r == '\t' || r == '\r':
			return ' '
		case unicode.IsControl(r), unicode.In(r, unicode.Cf, unicode.Zl, unicode.Zp, unicode.Co):
			return unicode.ReplacementChar
		case r == 0xFFFE || r == 0xFFFF:
			return unicode.ReplacementChar
		}
		return r
	}, strings.ToValidUTF8(s, "\uFFFD"))
}

// shorten keeps the first n characters of a name, the last of them an ellipsis
// where something was cut.
func shorten(s string, n int) string {
	r := []rune(clean(s))
	if len(r) <= n {
		return string(r)
	}
	return string(r[:n-1]) + "…"
}

// num writes a pixel figure to a tenth, as short as it goes.
func num(v float64) string {
	v = math.Round(v*10) / 10
	if v == 0 { // also minus zero
		return "0"
	}
	s := strconv.FormatFloat(v, 'f', -1, 64)
	if strings.HasPrefix(s, "0.") {
		return s[1:]
	}
	if strings.HasPrefix(s, "-0.") {
		return "-" + s[2:]
	}
	return s
}

// path appends path data for one polyline in pixels: an absolute start and
// steps from it in whole tenths, so that rounding does not add up.
func (d *doc) path(pts []point) {
	var lx, ly int
	for i, p := range pts {
		x, y := int(math.Round(p[0]*10)), int(math.Round(p[1]*10))
		switch i {
		case 0:
			d.raw("M" + num(p[0]) + " " + num(p[1]))
		default:
			if i == 1 {
				d.raw("l")
			}
			s := num(float64(x-lx) / 10)
			if i > 1 && s[0] != '-' {
				d.raw(" ")
			}
			d.raw(s)
			if s = num(float64(y-ly) / 10); s[0] != '-' {
				d.raw(" ")
			}
			d.raw(s)
		}
		lx, ly = x, y
	}
}

// letters draws text at (x, y) px in the given classes; anchor is start, middle
// or end.
func (d *doc) letters(x, y float64, class, anchor, s string) {
	d.raw("<text")
	d.attr("x", x)
	d.attr("y", y)
	if class != "" {
		d.raw(" class=\"" + class + "\"")
	}
	if anchor != "start" {
		d.raw(" text-anchor=\"" + anchor + "\"")
	}
	d.raw(">")
	d.text(s)
	d.raw("</text>")
}

// line draws a straight line in px.
func (d *doc) line(x0, y0, x1, y1 float64, class string) {
	d.raw("<path class=\"" + class + "\" d=\"M" + num(x0) + " " + num(y0) + "L" + num(x1) + " " + num(y1) + "\"/>")
}

// use places one of the symbols at p px, zoom times its size, turned by deg
// degrees clockwise.
func (d *doc) use(symbol string, p point, zoom, deg float64) {
	if zoom == 1 && deg == 0 {
		d.raw("<use href=\"#" + symbol + "\"")
		d.attr("x", p[0])
		d.attr("y", p[1])
		d.raw("/>")
		return
	}
	d.raw("<use href=\"#" + symbol + "\" transform=\"translate(" + num(p[0]) + " " + num(p[1]) + ")")
	if deg != 0 {
		d.raw("rotate(" + num(deg) + ")")
	}
	if zoom != 1 {
		d.raw("scale(" + strconv.FormatFloat(zoom, 'g', 3, 64) + ")")
	}
	d.raw("\"/>")
}

// textWidth estimates the width of s in px at the given letter height. The
// reader's face is not known; the estimate is that of a broad sans serif, so
// that labels keep clear of each other in most.
func textWidth(s string, size float64) float64 {
	w := 0.0
	for _, r := range s {
		switch {
		case strings.ContainsRune("iljI.,:;'|!·", r):
			w += 0.29
		case strings.ContainsRune("frt()[]/- ", r):
			w += 0.36
		case strings.ContainsRune("mwMW%—", r):
			w += 0.88
		case r >= 0x1100:
			w += 1.02
		case unicode.IsUpper(r):
			w += 0.70
		default:
			w += 0.57
		}
	}
	return w * size
}
