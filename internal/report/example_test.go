package report_test

import (
	"os"

	"selvage/internal/report"
)

// A table for the terminal: numbers flush right, the unit in the heading, and a
// dash with its reason where nothing was computed.
func ExampleTable_Text() {
	t := report.Table{
		Caption: "Robots at the end",
		Columns: []report.Column{
			{Name: "robot"},
			{Name: "driven", Unit: "m", Right: true},
			{Name: "error", Unit: "m", Right: true},
		},
		Rows: [][]string{
			{"mole", report.Digits(412.37, 2), report.Digits(0.1234, 0.02)},
			{"badger", report.Digits(98.1, 2), report.Missing("not joined to the datum")},
		},
	}
	if err := t.Text(os.Stdout, 80); err != nil {
		panic(err)
	}
	// Output:
	// Robots at the end
	// robot   driven  error
	//              m      m
	// ──────  ──────  ─────
	// mole     412.4  0.123
	// badger    98.1     –a
	// –a not computed: not joined to the datum
}
