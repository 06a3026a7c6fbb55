package report

import "strconv"

// The eight hues, by number: 0 ink, then blue, vermillion, bluish green,
// reddish purple, orange, sky blue and yellow, after Okabe and Ito, "Color
// universal design" (2008). Hue 8 is ink again with the first dash pattern, and
// so on.
const hues = 8

// dashes are the patterns for hue numbers from 8 on, in px.
var dashes = [...]string{"", "9 3", "9 3 2 3", "3 2.5", "14 3 2 3 2 3"}

func hueClass(hue int) string { return "k" + strconv.Itoa(hue%hues) }

func dashAttr(hue int) string {
	if p := dashes[hue/hues%len(dashes)]; p != "" {
		return " stroke-dasharray=\"" + p + "\""
	}
	return ""
}

// polyline draws a line in its hue, width px wide. Pale hues lie on an edge of ink, so that
// they stand out from the paper; the style sheet knows which. A single point is
// drawn as a dot.
func (d *doc) polyline(pts []point, hue int, width float64) {
	switch len(pts) {
	case 0:
		return
	case 1:
		d.raw("<circle class=\"dot " + hueClass(hue) + "\" r=\"2.2\"")
		d.attr("cx", pts[0][0])
		d.attr("cy", pts[0][1])
		d.raw("/>")
		return
	}
	start := len(d.b)
	d.raw("px\"" + dashAttr(hue) + " d=\"")
	d.path(pts)
	d.raw("\"/>")
	rest := string(d.b[start:])
	d.b = d.b[:start]
	if pale(hue) {
		d.raw("<path class=\"line edge\" style=\"stroke-width:" + num(width+1.2) + rest)
	}
	d.raw("<path class=\"line " + hueClass(hue) + "\" style=\"stroke-width:" + num(width) + rest)
}

func pale(hue int) bool { return hue%hues >= 4 }

// runs cuts a line where a point is not finite.
func runs(pts []point) [][]point {
	var out [][]point
	from := 0
	for i := 0; i <= len(pts); i++ {
		if i == len(pts) || !pts[i].finite() {
			if i > from {
				out = append(out, pts[from:i])
			}
			from = i + 1
		}
	}
	return out
}

func firstFinite(pts []point) (point, bool) {
	for _, p := range pts {
		if p.finite() {
			return p, true
		}
	}
	return point{}, false
}

func lastFinite(pts []point) (point, bool) {
	for i := len(pts) - 1; i >= 0; i-- {
		if pts[i].finite() {
			return pts[i], true
		}
	}
	return point{}, false
}

// svg opens a drawing of the given size in px with its title and description
// for screen readers.
func (d *doc) svg(id string, w, h float64, class, title, desc string) {
	d.raw("<svg xmlns=\"http://www.w3.org/2000/svg\" role=\"img\" aria-labelledby=\"" + id + "-t " + id + "-d\"")
	if class != "" {
		d.raw(" class=\"" + class + "\"")
	}
	d.attr("width", w)
	d.attr("height", h)
	d.raw(" viewBox=\"0 0 " + num(w) + " " + num(h) + "\"><title id=\"" + id + "-t\">")
	d.text(title)
	d.raw("</title><desc id=\"" + id + "-d\">")
	d.text(desc)
	d.raw("</desc>\n")
}
