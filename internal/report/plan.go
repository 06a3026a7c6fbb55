package report

import (
	"fmt"
	"math"
	"strconv"
)

// Plan is a view from above, in the datum. Robots that are not joined to the
// datum have no place in it: each island of theirs is drawn in a small plan of
// its own that says so. Where heights span enough to matter, a profile follows.
type Plan struct {
	Title                string // survey, for the title block
	Datum                string // name of the datum
	Epoch                string // which map epoch is drawn; several epochs are no map
	DatumTiedToNorth     bool   // the datum's y axis points to north, and x east
	Tracks               []Track
	Ties                 []TieMark
	Ellipses             []Ellipse
	EllipseMagnification float64 // how many times too large ellipses are drawn; 0 lets the drawing choose, and it says what it chose
}

// Track is the path of one robot session.
type Track struct {
	Robot  string       // its label
	Hue    int          // colour and dash pattern: 0 ink, 1 to 7 colours, from 8 on the same dashed; no two robots alike
	Points [][3]float64 // x, y, z in m, in time order; z = 0 in a planar survey; a NaN breaks the line
	Truth  [][3]float64 // where it really went, in the same frame, in m; empty where unknown
	Island int          // 0: joined to the datum, and Points are in it; any other number: an island with a frame of its own
}

// TieMark is one tie as drawn.
type TieMark struct {
	ID                  string
	From, To            [3]float64 // the two keyframes, x, y, z in m, in the frame of Island
	Island              int        // as in Track
	Verdict             string     // Held, Refused or Open
	Unchecked           bool       // held, and nothing else in the map would contradict it
	True                *bool      // whether it is a true sighting; simulated surveys only, else nil
	SmallestDetectableM float64    // m, smallest error of this tie that would be noticed; 0 where it is not known
}

// The verdicts on a tie.
const (
	Held    = "held"
	Refused = "refused"
	Open    = "open"
)

// Ellipse is the uncertainty of one position in the plan.
type Ellipse struct {
	At  [2]float64 // x, y in m, in the datum
	Cov [3]float64 // covariance xx, xy, yy in m²; drawn as the ellipse that holds 95 % of a normal distribution
}

func (p Plan) check() error {
	for _, t := range p.Tracks {
		if t.Hue < 0 {
			return fmt.Errorf("report: plan %q, track of %q: hue %d, expected 0 or more", p.Title, t.Robot, t.Hue)
		}
	}
	for _, t := range p.Ties {
		if t.Verdict != Held && t.Verdict != Refused && t.Verdict != Open {
			return fmt.Errorf("report: plan %q, tie %q: verdict %q, expected held, refused or open", p.Title, t.ID, t.Verdict)
		}
	}
	for _, e := range p.Ellipses {
		if !(e.Cov[0] >= 0 && e.Cov[2] >= 0 && e.Cov[0]*e.Cov[2]*(1+1e-9) >= e.Cov[1]*e.Cov[1]) || math.IsInf(e.Cov[0]+e.Cov[2], 0) {
			return fmt.Errorf("report: plan %q, ellipse at %v: covariance %v, expected finite and positive semidefinite", p.Title, e.At, e.Cov)
		}
	}
	if m := p.EllipseMagnification; !(m >= 0) || math.IsInf(m, 0) {
		return fmt.Errorf("report: plan %q: ellipse magnification %v, expected 0 or more", p.Title, m)
	}
	return nil
}

// islands lists the islands that are not the datum, in order of appearance.
func (p Plan) islands() []int {
	var out []int
next:
	for _, t := range p.Tracks {
		for _, have := range out {
			if have == t.Island {
				continue next
			}
		}
		if t.Island != 0 {
			out = append(out, t.Island)
		}
	}
	return out
}

// only is the plan of one island, by itself.
func (p Plan) only(island int) Plan {
	q := p
	q.Tracks, q.Ties = nil, nil
	for _, t := range p.Tracks {
		if t.Island == island {
			q.Tracks = append(q.Tracks, t)
		}
	}
	for _, t := range p.Ties {
		if t.Island == island {
			q.Ties = append(q.Ties, t)
		}
	}
	if island != 0 {
		q.Ellipses = nil
	}
	return q
}

// The widths in px at which plans are drawn: for a desk and A4 paper, for a
// phone, and for an island beside another.
const (
	deskWidth   = 860.0
	phoneWidth  = 358.0
	islandWidth = 410.0
)

func (d *doc) plan(p Plan, page Page) {
	id := d.id()
	d.raw("<figure class=\"plan\" aria-labelledby=\"" + id + "\">\n<figcaption id=\"" + id + "\" class=\"aloud\">Plan view of ")
	d.text(p.Title)
	d.raw("</figcaption>\n")
	joined := p.only(0)
	if len(joined.Tracks) == 0 {
		d.raw("<p class=\"empty\">No robot is joined to the datum: there is no common plan.</p>\n")
	} else {
		mag := joined.magnification()
		d.sheet(joined, deskWidth, "desk", mag)
		d.sheet(joined, phoneWidth, "phone", mag)
		if joined.steep() {
			d.profile(joined, deskWidth, "desk")
			d.profile(joined, phoneWidth, "phone")
		}
		d.key(joined, mag)
	}
	d.titleBlock(p, page)
	d.raw("</figure>\n")
	islands := p.islands()
	if len(islands) == 0 {
		return
	}
	d.raw("<div class=\"islands\">\n")
	for _, i := range islands {
		q := p.only(i)
		id := d.id()
		d.raw("<figure class=\"island\" aria-labelledby=\"" + id + "\">\n<figcaption id=\"" + id + "\">")
		d.text(q.robots())
		d.raw(": not joined to the datum. Drawn in a frame of its own; where this lies in the plan above, and which way it is turned, is not known.</figcaption>\n")
		d.sheet(q, islandWidth, "", 1)
		d.raw("</figure>\n")
	}
	d.raw("</div>\n")
}

// robots names the robots of a plan, each once.
func (p Plan) robots() string {
	seen := ""
	n := 0
next:
	for i, t := range p.Tracks {
		for _, before := range p.Tracks[:i] {
			if before.Robot == t.Robot {
				continue next
			}
		}
		if n++; n > 12 {
			return seen + " and others"
		}
		if seen != "" {
			seen += ", "
		}
		seen += shorten(t.Robot, 24)
	}
	return seen
}

// titleBlock is set as text, so that long names wrap and can be copied.
func (d *doc) titleBlock(p Plan, page Page) {
	d.raw("<dl class=\"titleblock\">\n")
	for _, c := range [...]struct{ class, name, is string }{
		{"wide", "Survey", p.Title}, {"", "Datum", p.Datum}, {"", "Map epoch", p.Epoch},
		{"", "Made", page.Made}, {"", "Made by", page.Version},
	} {
		if c.is == "" {
			c.is = "–"
		}
		d.raw("<div class=\"" + c.class + "\"><dt>" + c.name + "</dt><dd>")
		d.text(c.is)
		d.raw("</dd></div>\n")
	}
	d.raw("</dl>\n")
}

// key explains the forms that occur in the plan, with their counts.
func (d *doc) key(p Plan, mag float64) {
	var held, refused, open, unchecked, wrong int
	sizes, truth := emptySpan(), false
	for _, t := range p.Ties {
		switch t.Verdict {
		case Held:
			held++
		case Refused:
			refused++
		case Open:
			open++
		}
		if t.Unchecked {
			unchecked++
		}
		if t.contradicted() {
			wrong++
		}
		if t.SmallestDetectableM > 0 {
			sizes.add(t.SmallestDetectableM)
		}
	}
	for _, t := range p.Tracks {
		truth = truth || len(t.Truth) > 0
	}
	d.raw("<ul class=\"key\" aria-label=\"Key to the plan\">\n")
	item := func(sample, says string) {
		d.raw("<li><svg xmlns=\"http://www.w3.org/2000/svg\" aria-hidden=\"true\" width=\"36\" height=\"16\" viewBox=\"0 0 36 16\">" + sample + "</svg>")
		d.text(says)
		d.raw("</li>\n")
	}
	count := func(n int, sample, says string) {
		if n > 0 {
			item(sample, says+": "+strconv.Itoa(n))
		}
	}
	const across = " d=\"M2 8H34\"/>"
	item("<use href=\"#start\" x=\"18\" y=\"8\"/>", "start of a track")
	item("<use href=\"#newest\" x=\"18\" y=\"8\"/>", "newest pose")
	if truth {
		item("<path class=\"truth\""+across, "truth, under the tracks")
	}
	count(held, "<path class=\"tie\""+across+"<use href=\"#end\" x=\"2\" y=\"8\"/><use href=\"#end\" x=\"34\" y=\"8\"/>", "tie, held")
	count(unchecked, "<path class=\"tie\""+across+"<use href=\"#square\" x=\"18\" y=\"8\"/>", "of these unchecked")
	count(refused, "<path class=\"tie no\""+across+"<use href=\"#cross\" x=\"18\" y=\"8\"/>", "tie, refused")
	count(open, "<path class=\"tie may\""+across+"<use href=\"#ring\" x=\"18\" y=\"8\"/>", "tie, open")
	count(wrong, "<path class=\"tie\""+across+"<use href=\"#diamond\" x=\"18\" y=\"8\"/>", "verdict contradicts the simulated truth")
	if !sizes.empty() {
		thin, thick := TieMark{SmallestDetectableM: sizes.lo}, TieMark{SmallestDetectableM: sizes.hi}
		item("<path class=\"tie\" style=\"stroke-width:"+num(thin.width())+"\" d=\"M2 5H34\"/><path class=\"tie\" style=\"stroke-width:"+num(thick.width())+"\" d=\"M2 11H34\"/>",
			"width: smallest error a tie would show, "+strconv.FormatFloat(sizes.lo, 'g', 2, 64)+" to "+strconv.FormatFloat(sizes.hi, 'g', 2, 64)+"\u00a0m")
	}
	if len(p.Ellipses) > 0 {
		item("<ellipse class=\"ellipse\" cx=\"18\" cy=\"8\" rx=\"13\" ry=\"5\"/>", p.ellipseNote(mag))
	}
	d.raw("</ul>\n")
}

func (p Plan) ellipseNote(mag float64) string {
	if mag == 1 {
		return "95 % ellipses, drawn to scale"
	}
	return "95 % ellipses, drawn " + strconv.FormatFloat(mag, 'f', -1, 64) + " times too large"
}

// contradicted says that the verdict is not what the simulated truth asks for.
func (t TieMark) contradicted() bool {
	return t.True != nil && (t.Verdict == Held && !*t.True || t.Verdict == Refused && *t.True)
}

// width of the line of a tie in px: one where nothing is known; else the wider,
// the larger an error that could hide in it, from 5 cm to 5 m.
func (t TieMark) width() float64 {
	if !(t.SmallestDetectableM > 0) {
		return 1
	}
	return max(0.8, min(2.8, 0.8+math.Log10(t.SmallestDetectableM/0.05)))
}
