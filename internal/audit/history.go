package audit

import (
	"cmp"
	"fmt"
	"slices"
	"strings"

	"selvage/internal/report"
	"selvage/internal/survey"
)

// Turned is a tie whose verdict changed after the first one while the fleet ran.
type Turned struct {
	Tie      string   `json:"tie"`
	Verdicts []string `json:"verdicts"` // in the order of time
	Epochs   []uint64 `json:"epochs"`   // of the solutions that brought them
	Lost     bool     `json:"lost"`     // held once, and held no more
	Reason   string   `json:"reason"`   // for the last
}

// turned gathers the ties whose verdict changed: those lost first, then those that turned most often. A change under which the verdict
// stayed what it was, a ruling that came or went, is none.
func turned(changes []survey.ResultChange) []Turned {
	var all []Turned
	number := map[string]int{}
	for i := range changes {
		x := &changes[i]
		n, known := number[x.Tie]
		if !known {
			n = len(all)
			number[x.Tie] = n
			all = append(all, Turned{Tie: x.Tie})
		}
		t := &all[n]
		t.Reason = x.Reason
		if last := len(t.Verdicts) - 1; last >= 0 && t.Verdicts[last] == x.New {
			continue
		}
		t.Verdicts, t.Epochs = append(t.Verdicts, x.New), append(t.Epochs, x.Epoch)
	}
	all = slices.DeleteFunc(all, func(t Turned) bool { return len(t.Verdicts) < 2 })
	rank := func(t *Turned) int {
		if t.Lost {
			return 1
		}
		return 0
	}
	for i := range all {
		v := all[i].Verdicts
		all[i].Lost = v[len(v)-1] != report.Held && slices.Contains(v, report.Held)
	}
	slices.SortStableFunc(all, func(a, b Turned) int {
		return cmp.Or(cmp.Compare(rank(&b), rank(&a)), cmp.Compare(len(b.Verdicts), len(a.Verdicts)))
	})
	return all
}

// historyTable lists the ties that did more than to be decided once. It is empty when there are none.
func (a *Audit) historyTable() report.Table {
	t := report.Table{
		Caption: "Verdicts that turned while the fleet ran",
		Columns: []report.Column{{Name: "tie"}, {Name: "verdicts, with the solutions that brought them"}, {Name: "reason for the last"}},
	}
	lost := 0
	for i := range a.History {
		x := &a.History[i]
		if x.Lost {
			lost++
		}
		if !x.Lost && len(x.Verdicts) < 3 {
			continue
		}
		var words []string
		for k, v := range x.Verdicts {
			words = append(words, fmt.Sprintf("%s (%d)", v, x.Epochs[k]))
		}
		const most = 8
		if n := len(words); n > most {
			words = slices.Concat(words[:2], []string{fmt.Sprintf("%d more", n-most+1)}, words[n-most+3:])
		}
		t.Rows = append(t.Rows, []string{x.Tie, strings.Join(words, ", "), x.Reason})
	}
	t.Note = fmt.Sprintf("The verdict on %s changed after the first one. Listed are %d that had been held and are no more, then those that turned more than once.",
		count(len(a.History), "tie"), lost)
	return cut(t, "verdict_history.csv")
}
