package audit

import (
	"encoding/json"
	"fmt"
	"io"
)

// Text writes what needs a person's eye and the table of the weakest ties for a terminal.
func (a *Audit) Text(w io.Writer) error {
	for _, line := range a.attention() {
		if _, err := fmt.Fprintln(w, "- "+line); err != nil {
			return err
		}
	}
	t := a.tieTable()
	if len(t.Rows) == 0 {
		return nil
	}
	// A terminal is narrow: name, ends, finding, redundancies, detectable error and shift.
	short := t
	short.Columns, short.Rows, short.Note = nil, nil, ""
	columns := []int{0, 1, 2, 3, 7, 9, 10, 11, 13}
	for _, c := range columns {
		short.Columns = append(short.Columns, t.Columns[c])
	}
	for i, row := range t.Rows {
		if i == 20 {
			break
		}
		var cells []string
		for _, c := range columns {
			cells = append(cells, row[c])
		}
		short.Rows = append(short.Rows, cells)
	}
	fmt.Fprintln(w)
	return short.Text(w, 0)
}

// JSON writes the audit as audit.json has it.
func (a *Audit) JSON(w io.Writer) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	return e.Encode(a)
}
