package report

import (
	"fmt"
	"strconv"
	"strings"
)

// Table is a set of figures with a heading over each column. A figure that was
// not computed is written with Missing.
type Table struct {
	Caption string // what the table holds, a short phrase; required
	Note    string // shown beneath, may be empty
	Columns []Column
	Rows    [][]string // each as long as Columns; the first cell names the row
	File    string     // where the full table stands, named when rows are left out
}

// Column is the heading of one column.
type Column struct {
	Name  string
	Unit  string // such as "m"; empty where there is none
	Right bool   // numbers: set flush right
}

// maxRows is how many rows of one table the page shows; a page is read, a file
// is searched.
const maxRows = 1000

func (t Table) check() error {
	if t.Caption == "" {
		return fmt.Errorf("report: a table of %d columns has no caption", len(t.Columns))
	}
	if len(t.Columns) == 0 {
		return fmt.Errorf("report: table %q has no columns", t.Caption)
	}
	for i, r := range t.Rows {
		if len(r) != len(t.Columns) {
			return fmt.Errorf("report: table %q, row %d has %d cells, expected %d", t.Caption, i+1, len(r), len(t.Columns))
		}
	}
	return nil
}

// notes collects the reasons for missing figures and letters them in order.
type notes struct{ reasons []string }

// split turns a cell into what stands in it and the letter of its note. An
// empty cell under numbers is a missing figure too.
func (n *notes) split(cell string, right bool) (shown, letter string) {
	reason, missing := strings.CutPrefix(cell, missingMark)
	switch {
	case missing:
	case right && (cell == "" || cell == "–" || cell == "-"):
		reason = "no reason was given"
	case right && (cell == "NaN" || strings.HasSuffix(cell, "Inf")):
		reason = "no finite value"
	default:
		return clean(cell), ""
	}
	for i, have := range n.reasons {
		if have == reason {
			return "–", noteLetter(i)
		}
	}
	n.reasons = append(n.reasons, reason)
	return "–", noteLetter(len(n.reasons) - 1)
}

func noteLetter(i int) string {
	if i < 26 {
		return string(rune('a' + i))
	}
	return noteLetter(i/26-1) + string(rune('a'+i%26))
}

func (d *doc) table(t Table) {
	id := d.id()
	d.raw("<div class=\"scroll\" role=\"region\" tabindex=\"0\" aria-labelledby=\"" + id + "\">\n<table>\n<caption id=\"" + id + "\">")
	d.text(t.Caption)
	d.raw("</caption>\n<thead><tr>")
	for _, c := range t.Columns {
		d.raw("<th scope=\"col\"" + right(c) + ">")
		d.text(c.Name)
		if c.Unit != "" {
			d.raw(" <span class=\"unit\">")
			d.text(c.Unit)
			d.raw("</span>")
		}
		d.raw("</th>")
	}
	d.raw("</tr></thead>\n<tbody>\n")
	var n notes
	for i, row := range t.Rows {
		if i == maxRows {
			break
		}
		d.raw("<tr>")
		for j, cell := range row {
			shown, letter := n.split(cell, t.Columns[j].Right)
			tag := "td"
			if j == 0 {
				tag = "th scope=\"row\""
			}
			d.raw("<" + tag + right(t.Columns[j]) + ">")
			d.text(shown)
			if letter != "" {
				d.raw("<sup>" + letter + "</sup>")
			}
			d.raw("</" + tag[:2] + ">")
		}
		d.raw("</tr>\n")
	}
	d.raw("</tbody>\n</table>\n</div>\n")
	d.tableNotes(t, n)
}

func right(c Column) string {
	if c.Right {
		return " class=\"r\""
	}
	return ""
}

func (d *doc) tableNotes(t Table, n notes) {
	var lines []string
	if len(t.Rows) == 0 {
		lines = append(lines, "No rows.")
	}
	if len(t.Rows) > maxRows {
		s := "The first " + strconv.Itoa(maxRows) + " of " + strconv.Itoa(len(t.Rows)) + " rows."
		if t.File != "" {
			s += " All of them stand in " + t.File + "."
		}
		lines = append(lines, s)
	}
	if t.Note != "" {
		lines = append(lines, t.Note)
	}
	if len(lines) > 0 {
		d.raw("<p class=\"note\">")
		d.text(strings.Join(lines, " "))
		d.raw("</p>\n")
	}
	if len(n.reasons) == 0 {
		return
	}
	d.raw("<ul class=\"note\">")
	for i, r := range n.reasons {
		d.raw("<li><sup>" + noteLetter(i) + "</sup> not computed: ")
		d.text(r)
		d.raw("</li>")
	}
	d.raw("</ul>\n")
}
