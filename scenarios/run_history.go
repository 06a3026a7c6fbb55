package scenarios

import (
	"cmp"
	"fmt"
	"slices"
	"strings"

	"selvage/coordinator"
	"selvage/internal/report"
	"selvage/internal/survey"
	"selvage/msgs"
)

// history is the verdicts on one tie from the first on.
type history struct {
	tie     string
	from    string
	to      string
	changes []coordinator.Change
}

// histories returns those of all ties that the base has judged, in the order the ties came.
func (r *Run) histories() []history {
	all := r.Coordinator.History()
	var out []history
	for i, f := range r.Coordinator.Findings() {
		if len(all[i]) > 0 {
			out = append(out, history{f.Tie, f.From.Robot, f.To.Robot, all[i]})
		}
	}
	return out
}

// now is the present verdict.
func (h *history) now() msgs.VerdictKind { return h.changes[len(h.changes)-1].New }

// turns counts the changes of the verdict after the first; a ruling that left it as it was is none.
func (h *history) turns() (n int) {
	for i := range h.changes[1:] {
		if x := &h.changes[i+1]; x.Old != x.New {
			n++
		}
	}
	return n
}

// lost tells whether the tie was held once and is held no more.
func (h *history) lost() bool {
	return h.now() != msgs.Held && slices.ContainsFunc(h.changes, func(x coordinator.Change) bool { return x.New == msgs.Held })
}

// Changes returns every verdict on every tie, in the order of the solutions that brought them.
func (r *Run) Changes() []survey.ResultChange {
	var out []survey.ResultChange
	for _, h := range r.histories() {
		for i := range h.changes {
			x := &h.changes[i]
			c := survey.ResultChange{Tie: h.tie, StampNS: x.AtNS, Incarnation: x.Epoch.Incarnation, Epoch: x.Epoch.Number, New: wordOf(x.New), Reason: x.Reason}
			if x.Old != 0 {
				c.Old = wordOf(x.Old)
			}
			out = append(out, c)
		}
	}
	slices.SortStableFunc(out, func(a, b survey.ResultChange) int { return cmp.Compare(a.Epoch, b.Epoch) })
	return out
}

// countChanges counts the ties whose verdict changed.
func (r *Run) countChanges(out *Score) {
	for _, h := range r.histories() {
		if h.turns() > 0 {
			out.TiesChanged++
		}
		if h.lost() {
			out.TiesLost++
		}
	}
}

// story tells a history in words.
func (r *Run) story(h *history) string {
	var parts []string
	for i := range h.changes {
		x := &h.changes[i]
		word := x.New.String()
		if x.Old == x.New {
			word = "still " + word
		}
		when := fmt.Sprintf("epoch %d", x.Epoch.Number)
		if !r.OnBus { // there the clock is that of the base, not of the run
			when = clock(x.AtNS)
		}
		parts = append(parts, word+" at "+when)
	}
	const most = 6
	if n := len(parts); n > most {
		parts = slices.Concat(parts[:2], []string{fmt.Sprintf("%d more", n-most+1)}, parts[n-most+3:])
	}
	return strings.Join(parts, ", ")
}

// historyTables is empty where no verdict changed after the first.
func (r *Run) historyTables() []report.Table {
	var changed []history
	kinds := map[[2]msgs.VerdictKind]int{}
	for _, h := range r.histories() {
		if h.turns() == 0 {
			continue
		}
		changed = append(changed, h)
		for i := range h.changes[1:] {
			if x := &h.changes[i+1]; x.Old != x.New {
				kinds[[2]msgs.VerdictKind{x.Old, x.New}]++
			}
		}
	}
	if len(changed) == 0 {
		return nil
	}
	slices.SortStableFunc(changed, func(a, b history) int {
		return cmp.Or(cmp.Compare(b.weight(), a.weight()), cmp.Compare(b.turns(), a.turns()))
	})
	var words []string
	for _, k := range [][2]msgs.VerdictKind{{msgs.Held, msgs.Refused}, {msgs.Held, msgs.Open}, {msgs.Refused, msgs.Held}, {msgs.Refused, msgs.Open}, {msgs.Open, msgs.Held}, {msgs.Open, msgs.Refused}} {
		if kinds[k] > 0 {
			words = append(words, fmt.Sprintf("%d times from %s to %s", kinds[k], k[0], k[1]))
		}
	}
	t := report.Table{
		Caption: "Verdicts that changed",
		Note:    fmt.Sprintf("The verdict on %s changed after the first one, %s. Those that were held once and are no more come first.", count(len(changed), "tie"), list(words)),
		Columns: []report.Column{{Name: "tie"}, {Name: "from"}, {Name: "to"}, {Name: "verdicts"}, {Name: "reason for the last"}},
		File:    "verdict_history.csv",
	}
	const most = 60 // rows
	if n := len(changed); n > most {
		changed = changed[:most]
		t.Note = fmt.Sprintf("The first %d of %d. ", most, n) + t.Note
	}
	for i := range changed {
		h := &changed[i]
		t.Rows = append(t.Rows, []string{h.tie, h.from, h.to, r.story(h), h.changes[len(h.changes)-1].Reason})
	}
	return []report.Table{t}
}

// weight orders histories by how much a person should look at them.
func (h *history) weight() int {
	if h.lost() {
		return 1
	}
	return 0
}

// lost says which ties were held once and are no more.
func (r *Run) lost() []string {
	var out []string
	left := 0
	for _, h := range r.histories() {
		if !h.lost() {
			continue
		}
		const most = 4
		if len(out) == most {
			left++
			continue
		}
		out = append(out, fmt.Sprintf("Tie %s between %s and %s was held and is no more: %s.", h.tie, h.from, h.to, r.story(&h)))
	}
	if left > 0 {
		out = append(out, fmt.Sprintf("%s were held and are no more, see the table of verdicts that changed.", count(left, "more tie")))
	}
	return out
}
