package report

import (
	"bufio"
	"io"
	"strings"
	"unicode"
)

// gap is the space between two columns of a plain-text table.
const gap = 2

// Text writes the table as aligned plain lines no wider than width characters
// (0: as wide as it comes), without colour. Columns of words give way first,
// their cells cut with an ellipsis; numbers are never cut. Where even that is
// too wide, every row becomes a short list of its own.
func (t Table) Text(w io.Writer, width int) error {
	if err := t.check(); err != nil {
		return err
	}
	var n notes
	cells := make([][]string, len(t.Rows))
	for i, row := range t.Rows {
		cells[i] = make([]string, len(row))
		for j, c := range row {
			shown, letter := n.split(c, t.Columns[j].Right)
			cells[i][j] = shown + letter
		}
	}
	out := bufio.NewWriter(w)
	out.WriteString(clean(t.Caption) + "\n")
	if widths, ok := t.widths(cells, width); ok {
		t.grid(out, cells, widths)
	} else {
		t.stacked(out, cells)
	}
	if len(t.Rows) == 0 {
		out.WriteString("no rows\n")
	}
	if t.Note != "" {
		out.WriteString(clean(t.Note) + "\n")
	}
	for i, r := range n.reasons {
		out.WriteString("–" + noteLetter(i) + " not computed: " + clean(r) + "\n")
	}
	return out.Flush()
}

// widths finds how wide each column may be, and whether the table fits at all.
func (t Table) widths(cells [][]string, width int) ([]int, bool) {
	const least = 8 // characters a column of words keeps
	ws := make([]int, len(t.Columns))
	total := gap * (len(ws) - 1)
	for j, c := range t.Columns {
		ws[j] = max(cellWidth(clean(c.Name)), cellWidth(clean(c.Unit)))
		for _, row := range cells {
			ws[j] = max(ws[j], cellWidth(row[j]))
		}
		total += ws[j]
	}
	for width > 0 && total > width {
		widest := -1
		for j, c := range t.Columns {
			if !c.Right && ws[j] > least && (widest < 0 || ws[j] > ws[widest]) {
				widest = j
			}
		}
		if widest < 0 {
			return nil, false
		}
		ws[widest]--
		total--
	}
	return ws, true
}

func (t Table) grid(out *bufio.Writer, cells [][]string, ws []int) {
	line := func(cell func(j int) string) {
		var b strings.Builder
		for j, c := range t.Columns {
			if j > 0 {
				b.WriteString(strings.Repeat(" ", gap))
			}
			s := cut(cell(j), ws[j])
			pad := strings.Repeat(" ", ws[j]-cellWidth(s))
			if c.Right {
				b.WriteString(pad + s)
			} else {
				b.WriteString(s + pad)
			}
		}
		out.WriteString(strings.TrimRight(b.String(), " ") + "\n")
	}
	units := false
	for _, c := range t.Columns {
		units = units || c.Unit != ""
	}
	line(func(j int) string { return clean(t.Columns[j].Name) })
	if units {
		line(func(j int) string { return clean(t.Columns[j].Unit) })
	}
	line(func(j int) string { return strings.Repeat("─", ws[j]) })
	for _, row := range cells {
		line(func(j int) string { return row[j] })
	}
}

func (t Table) stacked(out *bufio.Writer, cells [][]string) {
	for _, row := range cells {
		for j, c := range t.Columns {
			if j > 0 {
				out.WriteString("  ")
			}
			out.WriteString(clean(c.Name) + ": " + row[j])
			if c.Unit != "" && !strings.HasPrefix(row[j], "–") {
				out.WriteString(" " + clean(c.Unit))
			}
			out.WriteString("\n")
		}
	}
}

// cut shortens s to w columns of a terminal.
func cut(s string, w int) string {
	if cellWidth(s) <= w {
		return s
	}
	n, at := 0, 0
	for i, r := range s {
		if n += runeWidth(r); n > w-1 {
			break
		}
		at = i + len(string(r))
	}
	return s[:at] + "…"
}

func cellWidth(s string) int {
	n := 0
	for _, r := range s {
		n += runeWidth(r)
	}
	return n
}

// runeWidth is how many columns a terminal gives a character: none to combining
// marks, two to the scripts that are set wide.
func runeWidth(r rune) int {
	switch {
	case unicode.In(r, unicode.Mn, unicode.Me):
		return 0
	case unicode.In(r, unicode.Han, unicode.Hiragana, unicode.Katakana, unicode.Hangul),
		r >= 0xFF01 && r <= 0xFF60, r >= 0x1F300 && r <= 0x1FAFF:
		return 2
	}
	return 1
}
