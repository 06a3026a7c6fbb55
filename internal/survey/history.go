package survey

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
)

// ResultChange is one turn in the history of the verdict on a tie.
type ResultChange struct {
	Tie     string
	StampNS int64 // on the clock of the base

	// The solution that brought it: solutions are numbered within an incarnation of the base.
	Incarnation, Epoch uint64

	Old    string // the verdict before: held, refused or open; empty in the first of an incarnation. It is New where only a ruling came or went
	New    string
	Reason string
}

var historyColumns = []column{{name: "tie"}, {name: "stamp_ns"}, {name: "incarnation"}, {name: "epoch"}, {name: "old"}, {name: "new"}, {name: "reason"}}

const (
	historyTie, historyStamp, historyIncarnation, historyEpoch, historyOld, historyNew, historyReason = 0, 1, 2, 3, 4, 5, 6

	historyName = resultsName + "/verdict_history.csv"
)

// historian holds the rules between the rows of a history.
type historian struct {
	last  ResultChange // row
	rows  int
	found map[string]ResultChange // the last row on each tie
}

// check complains unless x may follow the rows before it.
func (h *historian) check(x *ResultChange, fault func(c int, found, expected string)) {
	if !validVerdict(x.New) {
		fault(historyNew, quote(x.New), "held, refused or open")
	}
	if !validNote(x.Reason) {
		fault(historyReason, quote(x.Reason), "one line of printable text")
	}
	if x.Incarnation < h.last.Incarnation {
		fault(historyIncarnation, strconv.FormatUint(x.Incarnation, 10), fmt.Sprintf("at least %d, as in the row before", h.last.Incarnation))
	} else if x.Incarnation == h.last.Incarnation && h.rows > 0 {
		if x.Epoch < h.last.Epoch {
			fault(historyEpoch, strconv.FormatUint(x.Epoch, 10), fmt.Sprintf("at least %d, as in the row before", h.last.Epoch))
		}
		if x.StampNS < h.last.StampNS {
			fault(historyStamp, strconv.FormatInt(x.StampNS, 10), fmt.Sprintf("at least %d, as in the row before", h.last.StampNS))
		}
	}
	old, known := h.found[x.Tie]
	switch {
	case !known || old.Incarnation != x.Incarnation:
		if x.Old != "" {
			fault(historyOld, quote(x.Old), "nothing in the first verdict of an incarnation")
		}
	case x.Epoch <= old.Epoch:
		fault(historyEpoch, strconv.FormatUint(x.Epoch, 10), fmt.Sprintf("more than %d, that of the verdict before", old.Epoch))
	case x.Old != old.New:
		fault(historyOld, quote(x.Old), old.New+", the verdict before")
	}
	h.last, h.found[x.Tie] = *x, *x
	h.rows++
}

// WriteHistory writes results/verdict_history.csv into the survey folder dir, complete or not at all; it begins with a comment line, "# "
// and note. The rows are in the order of the solutions, and of each tie every row begins with the verdict that the one before ended
// with.
func WriteHistory(dir string, all []ResultChange, note string) error {
	if !validNote(note) {
		return fmt.Errorf("survey: note %s, expected one line of printable text", quote(note))
	}
	var w csvWriter
	w.comment(note)
	w.header(historyColumns, nil)
	h := historian{found: map[string]ResultChange{}}
	for i := range all {
		x := &all[i]
		if !validTie(x.Tie) {
			return fmt.Errorf("survey: history of tie %s, expected %s", quote(x.Tie), tieRule)
		}
		var err error
		h.check(x, func(c int, found, expected string) {
			if err == nil {
				err = fmt.Errorf("survey: history of tie %s: %s is %s, expected %s", quote(x.Tie), historyColumns[c].name, found, expected)
			}
		})
		if err != nil {
			return err
		}
		w.text(x.Tie)
		w.int(x.StampNS)
		w.text(strconv.FormatUint(x.Incarnation, 10))
		w.text(strconv.FormatUint(x.Epoch, 10))
		w.text(x.Old)
		w.text(x.New)
		w.text(x.Reason)
		w.end()
	}
	return putResult(dir, historyName, w.b)
}

// putResult puts one file of the results in place as a whole.
func putResult(dir, name string, text []byte) error {
	path := filepath.Join(dir, filepath.FromSlash(name))
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	tmp := path + ".new"
	err := writeFile(tmp, text)
	if err == nil {
		err = os.Rename(tmp, path)
	}
	if err != nil {
		return fmt.Errorf("survey: %w", errors.Join(err, os.Remove(tmp)))
	}
	return nil
}

// ReadHistory reads results/verdict_history.csv of the survey folder dir, from which s was read; it returns nothing when there is no
// such file. An error is *Violations when the content breaks the rules, see [WriteHistory]; every row is on one of the ties of s.
func ReadHistory(dir string, s *Survey) ([]ResultChange, error) {
	known := make(map[string]bool, len(s.Ties))
	for i := range s.Ties {
		known[s.Ties[i].ID] = true
	}
	var bad sink
	t, err := openTable(dir, historyName, historyColumns, true, &bad)
	if err != nil {
		return nil, err
	}
	if t == nil {
		return nil, bad.err()
	}
	defer t.close()
	var all []ResultChange
	h := historian{found: map[string]ResultChange{}}
	for {
		ok, err := t.next()
		if err != nil {
			return nil, err
		}
		if !ok {
			break
		}
		x := ResultChange{Tie: string(t.text(historyTie)), Old: string(t.text(historyOld)), New: string(t.text(historyNew)), Reason: string(t.text(historyReason))}
		if !known[x.Tie] {
			t.faultAt(historyTie, quote(x.Tie), "the id of a tie of this survey")
		}
		x.StampNS, _ = t.int64(historyStamp)
		x.Incarnation, _ = t.uint64(historyIncarnation)
		x.Epoch, _ = t.uint64(historyEpoch)
		if t.bad {
			continue
		}
		h.check(&x, t.faultAt)
		if !t.bad {
			all = append(all, x)
		}
	}
	if err := bad.err(); err != nil {
		return nil, err
	}
	return all, nil
}
