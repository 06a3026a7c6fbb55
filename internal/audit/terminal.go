package audit

import (
	"encoding/json"
	"fmt"
	"io"
)

// Text writes what needs a person's eye and the table of the weakest ties for a terminal.
func (a *Audit) Text(w io.Writer) error {
	for _, line := range append(a.attention(), a.basinLine()) {
		if _, err := fmt.Fprintln(w, "- "+line); err != nil {
			return err
		}
	}
	// A terminal is narrow: name, ends, finding, statistic, redundancies, detectable error and shift.
	t := a.tieTable().pick(0, 1, 2, 3, 7, 9, 10, 11, 13)
	if len(t.Rows) == 0 {
		return nil
	}
	t.Note, t.Rows = "", t.Rows[:min(len(t.Rows), 20)]
	fmt.Fprintln(w)
	return t.Text(w, 0)
}

// JSON writes the audit as audit.json has it.
func (a *Audit) JSON(w io.Writer) error {
	e := json.NewEncoder(w)
	e.SetIndent("", "  ")
	return e.Encode(a)
}
