package report

import (
	"errors"
	"fmt"
	"io"
	"strconv"
)

// MaxBytes is the largest file Write produces.
const MaxBytes = 3_000_000

// Safety is the caution that every page carries, whatever else it says.
const Safety = "This map is evidence for people who decide; it is no safety function. " +
	"It must not be the only thing that keeps a vehicle from a person or an edge. " +
	"Boundaries, clearances and volumes that bind anyone need a licensed surveyor and the rules of the site."

// Page is one report. Empty lists leave their section out, except Attention,
// whose emptiness is itself said.
type Page struct {
	Title     string       // name of the survey or rehearsal; required
	Kind      string       // what sort of report this is, such as "Rehearsal" or "Audit"
	Made      string       // date and time with zone, as it is to be printed; required
	Version   string       // of the program that made it
	Finding   string       // one sentence; required
	Cautions  []string     // shown with the finding, before Safety
	Attention []string     // what needs a person's eye, most urgent first
	Plans     []Plan       // drawn in order
	Charts    []ChartGroup // drawn in order
	Tables    []Table      // set in order
	Method    []string     // how it was computed, a paragraph each
	Files     []File       // the numbers behind the page, for machines
}

// File names a machine-readable companion of the page.
type File struct {
	Name  string // relative to the page
	About string // what it holds, with units
}

// ErrTooLarge says that a page does not fit in MaxBytes even with its tracks
// drawn coarsely.
var ErrTooLarge = errors.New("report: page does not fit in 3 MB")

// Write sets the page and writes it to w in one piece. Tracks and series are
// simplified to half a pixel, or coarser, and said so, where the page would not
// fit otherwise. An inconsistent page is refused with an error that names the
// place, and nothing is written.
func Write(w io.Writer, p Page) error {
	if err := p.check(); err != nil {
		return err
	}
	for tol := 0.5; tol <= 8; tol *= 2 {
		d := &doc{tol: tol}
		d.page(p)
		if len(d.b) <= MaxBytes {
			_, err := w.Write(d.b)
			return err
		}
	}
	return ErrTooLarge
}

func (p Page) check() error {
	for _, need := range []struct{ what, have string }{
		{"Title", p.Title}, {"Made", p.Made}, {"Finding", p.Finding},
	} {
		if need.have == "" {
			return fmt.Errorf("report: %s is empty, expected text", need.what)
		}
	}
	for _, pl := range p.Plans {
		if err := pl.check(); err != nil {
			return err
		}
	}
	for _, g := range p.Charts {
		for _, c := range g.Charts {
			if err := c.check(); err != nil {
				return err
			}
		}
	}
	for _, t := range p.Tables {
		if err := t.check(); err != nil {
			return err
		}
	}
	return nil
}

func (d *doc) page(p Page) {
	d.raw("<!DOCTYPE html>\n<html xmlns=\"http://www.w3.org/1999/xhtml\" lang=\"en\" xml:lang=\"en\">\n<head>\n<meta charset=\"utf-8\"/>\n")
	d.raw("<meta name=\"viewport\" content=\"width=device-width, initial-scale=1\"/>\n<meta name=\"color-scheme\" content=\"light dark\"/>\n")
	// The browser itself then refuses scripts and everything fetched.
	d.raw("<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\"/>\n<title>")
	if p.Kind != "" {
		d.text(p.Kind + ": ")
	}
	d.text(p.Title)
	d.raw("</title>\n<style>\n")
	d.raw(stylesheet)
	d.raw("</style>\n</head>\n<body>\n")
	d.raw(symbols)
	d.raw("<main>\n")
	d.head(p)
	if len(p.Plans) > 0 {
		d.section("plan", "Plan")
		for _, pl := range p.Plans {
			d.plan(pl, p)
		}
		d.raw("</section>\n")
	}
	if len(p.Charts) > 0 {
		d.section("charts", "Charts")
		for _, g := range p.Charts {
			d.charts(g)
		}
		d.raw("</section>\n")
	}
	if len(p.Tables) > 0 {
		d.section("tables", "Figures")
		for _, t := range p.Tables {
			d.table(t)
		}
		d.raw("</section>\n")
	}
	d.method(p)
	d.files(p)
	d.raw("</main>\n</body>\n</html>\n")
}

// head sets the title line, the finding with its cautions, the way around the
// page, and what needs a person's eye.
func (d *doc) head(p Page) {
	d.raw("<header>\n<p class=\"over\">")
	if p.Kind != "" {
		d.text(p.Kind)
		d.raw(" · ")
	}
	d.raw("<b>")
	d.text(p.Title)
	d.raw("</b> · ")
	d.text(p.Made)
	d.raw("</p>\n<h1>")
	d.text(p.Finding)
	d.raw("</h1>\n<ul class=\"cautions\">\n")
	for _, c := range p.Cautions {
		d.raw("<li>")
		d.text(c)
		d.raw("</li>\n")
	}
	d.raw("<li class=\"safety\">")
	d.text(Safety)
	d.raw("</li>\n</ul>\n<nav aria-label=\"On this page\"><ul>\n")
	for _, s := range []struct {
		have     bool
		id, name string
	}{
		{true, "attention", "Needs a person’s eye"},
		{len(p.Plans) > 0, "plan", "Plan"},
		{len(p.Charts) > 0, "charts", "Charts"},
		{len(p.Tables) > 0, "tables", "Figures"},
		{len(p.Method) > 0, "method", "How it was computed"},
		{len(p.Files) > 0, "files", "Files"},
	} {
		if s.have {
			d.raw("<li><a href=\"#" + s.id + "\">" + s.name + "</a></li>\n")
		}
	}
	d.raw("</ul></nav>\n</header>\n")
	d.section("attention", "Needs a person’s eye")
	if len(p.Attention) == 0 {
		d.raw("<p>Nothing was found that does.</p>\n")
	} else {
		d.raw("<ol class=\"attention\">\n")
		for _, a := range p.Attention {
			d.raw("<li>")
			d.text(a)
			d.raw("</li>\n")
		}
		d.raw("</ol>\n")
	}
	d.raw("</section>\n")
}

func (d *doc) method(p Page) {
	if len(p.Method) == 0 {
		return
	}
	d.section("method", "How it was computed")
	for _, m := range p.Method {
		d.raw("<p>")
		d.text(m)
		d.raw("</p>\n")
	}
	d.raw("<p>Lines are simplified to within " + strconv.FormatFloat(d.tol, 'g', -1, 64) + " pixel of the drawing.")
	if p.Version != "" {
		d.raw(" Made by ")
		d.text(p.Version)
		d.raw(".")
	}
	d.raw("</p>\n</section>\n")
}

func (d *doc) files(p Page) {
	if len(p.Files) == 0 {
		return
	}
	d.section("files", "Files")
	d.raw("<dl class=\"files\">\n")
	for _, f := range p.Files {
		d.raw("<dt><code>")
		d.text(f.Name)
		d.raw("</code></dt><dd>")
		d.text(f.About)
		d.raw("</dd>\n")
	}
	d.raw("</dl>\n</section>\n")
}

func (d *doc) section(id, title string) {
	d.raw("<section id=\"" + id + "\" aria-labelledby=\"" + id + "-h\">\n<h2 id=\"" + id + "-h\">" + title + "</h2>\n")
}
