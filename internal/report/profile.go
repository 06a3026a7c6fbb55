package report

import "strconv"

// steep says whether heights span enough to matter: half a metre, and a
// hundredth of the site.
func (p Plan) steep() bool {
	dz := p.bounds(2).size()
	return dz >= 0.5 && dz >= 0.01*max(p.bounds(0).size(), p.bounds(1).size())
}

// profile draws the heights against x, or against y in a site that is longer
// that way, beneath the plan.
func (d *doc) profile(p Plan, width float64, class string) {
	along, axis := "x", 0
	if p.bounds(1).size() > 1.3*p.bounds(0).size() {
		along, axis = "y", 1
	}
	plan, step := p.layout(width)
	v := view{sx: plan.sx, x0: plan.x0, zoom: plan.zoom}
	f := box{plan.frame.x0, 26, plan.frame.x1, 0}
	hs, zs := p.bounds(axis), p.bounds(2)
	if axis == 1 { // no common axis with the plan: use the whole width
		f.x1 = width - 10
		v.sx = (f.w() - 40) / hs.size()
		v.x0 = hs.lo - 20/v.sx
		step = niceStep(spacing(width) / v.sx)
	}
	if tall := width * 0.6 / zs.size(); v.sx > tall { // a shaft
		v.sx = tall
		v.x0 = (hs.lo+hs.hi)/2 - f.w()/2/v.sx
		step = niceStep(spacing(width) / v.sx)
	}
	// Exaggerated towards a sixth of the width, and it is said how much.
	times := 1.0
	if want := width / 6 / (zs.size() * v.sx); want >= 2 {
		times = niceStep(want / 2)
	}
	v.sy = v.sx * times
	v.y0 = zs.lo - 16/v.sy
	f.y1 = f.y0 + zs.size()*v.sy + 32
	v.frame = f
	stepZ := niceStep(34 / v.sy)

	title := "Profile: z against " + along + ", in m"
	if times != 1 {
		title += "; heights " + strconv.FormatFloat(times, 'f', -1, 64) + " times too large"
	}
	line := func(pts [][3]float64) []point {
		out := make([]point, len(pts))
		for i, q := range pts {
			out[i] = v.px(q[axis], q[2])
		}
		return out
	}
	id := d.id()
	d.svg(id, f.x1+10, f.y1+26, class, "Profile of "+p.Title,
		"Heights from "+tickText(zs.lo, 0.1)+" to "+tickText(zs.hi, 0.1)+" metres against "+along+".")
	d.letters(f.x0, 16, "i", "start", title)
	d.grid(v, step, stepZ)
	pen := newPlacer(box{f.x0 + 2, f.y0 + 2, f.x1 - 2, f.y1 - 2})
	d.tracks(p.Tracks, line, v.zoom, pen)
	d.names(p.Tracks, line, false, v.zoom, pen)
	d.frame(f)
	d.raw("</svg>\n")
}
