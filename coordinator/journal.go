package coordinator

import (
	"fmt"
	"maps"
	"slices"

	"selvage/msgs"
)

// journal is what has come of one journal of a robot.
type journal struct {
	id     msgs.JournalID
	safe   uint64 // every record up to this one
	beyond map[uint64]bool
	newest uint64 // record number, by the heartbeat or by the records
}

// Bounds on what one robot can make the base remember: journals, and how far ahead of a gap its records may be.
const (
	maxJournals = 1 << 10
	window      = 1 << 16
)

// journalOf returns the journal that a header speaks of. One that was never heard of is the newest: an agent that starts on an
// empty disk begins it.
func (r *robot) journalOf(h *msgs.Header) (*journal, error) {
	l := r.journals[h.Journal]
	if l == nil {
		if len(r.journals) == maxJournals {
			return nil, fmt.Errorf("%s has a new journal, %d are the most", r.name, maxJournals)
		}
		l = &journal{id: h.Journal, beyond: map[uint64]bool{}}
		r.journals[h.Journal] = l
		r.turnTo(l)
	}
	return l, nil
}

// turnTo makes l the present journal: what the agent of another one said of itself does not hold.
func (r *robot) turnTo(l *journal) {
	if r.current != l {
		r.current, r.version, r.applied = l, 0, msgs.Epoch{}
	}
}

// take notes a record; it is not fresh when it had come before.
func (l *journal) take(n uint64) (fresh bool, err error) {
	switch {
	case n <= l.safe || l.beyond[n]:
		return false, nil
	case n-l.safe > window:
		return false, fmt.Errorf("record %d, expected at most %d: %d is missing", n, l.safe+window, l.safe+1)
	}
	l.beyond[n] = true
	l.newest = max(l.newest, n)
	for l.beyond[l.safe+1] {
		l.safe++
		delete(l.beyond, l.safe)
	}
	return true, nil
}

// announced notes the number of the newest record as the robot has it.
func (l *journal) announced(newest uint64) {
	if newest > l.safe {
		l.newest = max(l.newest, min(newest-l.safe, window)+l.safe)
	}
}

// gappy tells whether a record is missing.
func (l *journal) gappy() bool { return l.newest > l.safe }

// maxGaps bounds a want; the rest is asked for when these are filled.
const maxGaps = 64

// gaps lists the record numbers that are missing below the newest known.
func (l *journal) gaps() [][2]uint64 {
	var out [][2]uint64
	next := l.safe + 1
	for _, n := range slices.Sorted(maps.Keys(l.beyond)) {
		if n > next {
			out = append(out, [2]uint64{next, n - 1})
		}
		next = n + 1
	}
	if l.newest >= next {
		out = append(out, [2]uint64{next, l.newest})
	}
	return out[:min(len(out), maxGaps)]
}
