package journal

import (
	"bytes"
	"errors"
	"fmt"
	"io/fs"
	"iter"
	"slices"
	"sort"
	"sync"
)

var (
	// ErrFull means that too much waits for a disk that does not take it.
	ErrFull = errors.New("the journal holds as much as it can that is not on the disk yet")
	// ErrFinished means that the survey was closed: its journal takes no more.
	ErrFinished = errors.New("the survey of this journal is finished")
	// ErrClosed means that the journal is not open any more.
	ErrClosed = errors.New("the journal is closed")
)

// Journal is an open journal. Its methods may be called concurrently.
type Journal struct {
	folder  Folder
	owner   Owner
	limits  limits
	seed    uint32
	torn    int64
	release func() error

	// What goes to the disk. Who holds syncing may take mu, not the other way round.
	syncing sync.Mutex
	held    []byte // the records after durable up to heldTo: written or not, but not durable
	heldTo  uint64
	spare   []byte // empty, to take the place of fresh
	segment File   // that is written on; nil when the next record begins one
	size    int
	ordinal uint64 // of the newest segment there was
	spans   []span
	marked  bool // as finished, durably: a mark that was found when it was opened may be in memory only

	mu       sync.Mutex
	fresh    []byte // the records after heldTo
	last     uint64
	durable  uint64
	waiting  int // bytes that are not durable
	finished bool
	closed   bool
}

// Owner returns whose journal it is, with the id that it has.
func (j *Journal) Owner() Owner { return j.owner }

// Torn returns how many bytes without a whole record stood at the end of the journal when it was opened: a crash left them.
func (j *Journal) Torn() int64 { return j.torn }

// Last returns the number of the newest record, 0 for none.
func (j *Journal) Last() uint64 {
	j.mu.Lock()
	defer j.mu.Unlock()
	return j.last
}

// Durable returns the number up to which records are on the disk. Right after opening that may be less than what there is.
func (j *Journal) Durable() uint64 {
	j.mu.Lock()
	defer j.mu.Unlock()
	return j.durable
}

// Ready tells why Append would refuse a record: with ErrFull, ErrFinished or ErrClosed; nil when it would not.
func (j *Journal) Ready() error {
	j.mu.Lock()
	defer j.mu.Unlock()
	return j.ready()
}

func (j *Journal) ready() error {
	switch {
	case j.closed:
		return ErrClosed
	case j.finished:
		return ErrFinished
	case j.waiting >= j.limits.held:
		return ErrFull
	}
	return nil
}

// Append adds a record of a kind from 1 to 255 and returns its number. It does not wait for the disk: the record is durable when
// a Sync has returned that number or a higher one.
func (j *Journal) Append(kind byte, payload []byte) (uint64, error) {
	if kind == 0 {
		panic("journal: record of kind 0")
	}
	if len(payload) > MaxPayload {
		return 0, fmt.Errorf("record of %d bytes, expected at most %d", len(payload), MaxPayload)
	}
	j.mu.Lock()
	defer j.mu.Unlock()
	if err := j.ready(); err != nil {
		return 0, err
	}
	j.last++
	j.fresh = appendRecord(j.fresh, j.seed, j.last, j.last-j.durable, kind, payload)
	j.waiting += preamble + len(payload)
	return j.last, nil
}

// Sync makes durable what was appended before the call, and returns up to which number all is durable. After an error that is
// less; the records wait for the next Sync, which may succeed. Of callers at the same time one does the work of all.
func (j *Journal) Sync() (durable uint64, err error) {
	want := j.Last()
	j.syncing.Lock()
	defer j.syncing.Unlock()
	if durable = j.Durable(); durable >= want {
		return durable, nil
	}
	if j.gone() {
		return durable, ErrClosed
	}
	return j.flush()
}

func (j *Journal) gone() bool {
	j.mu.Lock()
	defer j.mu.Unlock()
	return j.closed
}

// flush makes all that there is durable. The caller holds syncing.
func (j *Journal) flush() (uint64, error) {
	j.mu.Lock()
	durable := j.durable
	if len(j.held) == 0 {
		j.held, j.fresh, j.spare = j.fresh, j.spare[:0], nil
	} else { // a sync has failed, or the journal was just opened
		j.held = append(j.held, j.fresh...)
		j.fresh = j.fresh[:0]
	}
	j.heldTo = j.last
	j.mu.Unlock()
	if len(j.held) == 0 {
		return durable, nil
	}
	if err := j.write(j.held, durable+1, j.heldTo); err != nil {
		return durable, fmt.Errorf("journal: %w", err)
	}
	j.mu.Lock()
	defer j.mu.Unlock()
	j.durable = j.heldTo
	j.waiting = len(j.fresh)
	j.spare, j.held = j.held[:0], nil
	return j.durable, nil
}

// write puts bytes that hold the records first to through onto the disk. After an error the segment is not written on. The caller
// holds syncing.
func (j *Journal) write(b []byte, first, through uint64) error {
	if j.segment != nil && j.size >= j.limits.segment {
		err := j.segment.Close() // all of it is durable
		j.segment = nil
		if err != nil {
			return err
		}
	}
	if j.segment != nil {
		err := write(j.segment, b)
		if err == nil {
			err = j.segment.Sync()
		}
		if err != nil {
			err = errors.Join(fmt.Errorf("%s: %w", segmentName(j.ordinal), err), j.segment.Close())
			j.segment = nil
			return err
		}
		j.size += len(b)
		return nil
	}
	j.ordinal++
	h := header{owner: j.owner, first: first, through: through, ordinal: j.ordinal}
	f, err := publish(j.folder, segmentName(j.ordinal), h.bytes(), b)
	if err != nil {
		return err
	}
	j.segment, j.size = f, headerSize+len(b)
	j.spans = append(j.spans, span{segmentName(j.ordinal), first})
	return nil
}

// Finish closes the survey: when it returns without an error all records are durable and the journal, also when it is opened
// again, takes no more.
func (j *Journal) Finish() error {
	j.syncing.Lock()
	defer j.syncing.Unlock()
	j.mu.Lock()
	before, over := j.finished, j.closed
	j.finished = true // from here on nothing comes behind the mark
	j.mu.Unlock()
	switch {
	case over:
		return ErrClosed
	case j.marked:
		return nil
	}
	if err := j.mark(finished); err != nil {
		j.mu.Lock()
		j.finished = before
		j.mu.Unlock()
		return err
	}
	j.marked = true
	return nil
}

// mark makes all records durable, and behind them a mark. The caller holds syncing.
func (j *Journal) mark(what byte) error {
	durable, err := j.flush()
	if err != nil {
		return err
	}
	if err := j.write(appendRecord(nil, j.seed, durable, 0, 0, []byte{what}), durable+1, durable); err != nil {
		return fmt.Errorf("journal: %w", err)
	}
	return nil
}

// Close makes all records durable and leaves the journal to others. After an error the caller cannot know what is durable beyond the
// number of the last Sync.
func (j *Journal) Close() error {
	j.syncing.Lock()
	defer j.syncing.Unlock()
	j.mu.Lock()
	already, over := j.closed, j.finished
	j.closed = true
	j.mu.Unlock()
	if already {
		return ErrClosed
	}
	_, err := j.flush()
	if err == nil && j.segment != nil && !over {
		err = j.mark(closed)
	}
	if j.segment != nil {
		err = errors.Join(err, j.segment.Close())
		j.segment = nil
	}
	return errors.Join(err, j.release())
}

// From returns the records from number first on, to the newest at the time of the call. A payload is good until the next step. After an
// error there are no more.
func (j *Journal) From(first uint64) iter.Seq2[Record, error] {
	j.syncing.Lock()
	spans := slices.Clone(j.spans)
	j.mu.Lock()
	durable := j.durable
	waiting := append(bytes.Clone(j.held), j.fresh...)
	j.mu.Unlock()
	j.syncing.Unlock()
	first = max(first, 1)
	return func(yield func(Record, error) bool) {
		at := max(sort.Search(len(spans), func(i int) bool { return spans[i].first > first })-1, 0)
		var buf []byte
		for ; at < len(spans) && spans[at].first <= durable; at++ {
			through := durable
			if at+1 < len(spans) {
				through = min(through, spans[at+1].first-1)
			}
			if through < max(first, spans[at].first) {
				continue
			}
			b, err := readAll(j.folder, spans[at].name, buf)
			if err != nil {
				yield(Record{}, fmt.Errorf("journal: %w", err))
				return
			}
			buf = b
			w := walk{b: b, seed: j.seed, at: headerSize, number: spans[at].first - 1}
			for w.number < through {
				r, ok := w.next()
				if !ok {
					yield(Record{}, &Damage{spans[at].name, int64(w.at), fmt.Sprintf("no record %d, which was durable", w.number+1)})
					return
				}
				if r.Number >= first && !yield(r, nil) {
					return
				}
			}
		}
		w := walk{b: waiting, seed: j.seed, number: durable}
		for r, ok := w.next(); ok; r, ok = w.next() {
			if r.Number >= first && !yield(r, nil) {
				return
			}
		}
	}
}

// stateName is the file of the state.
const stateName = "state"

// SetState replaces what State returns, durably and as a whole: after a crash it is the old or the new one.
func (j *Journal) SetState(payload []byte) error {
	j.syncing.Lock()
	defer j.syncing.Unlock()
	if j.gone() {
		return ErrClosed
	}
	if len(payload) > MaxPayload {
		return fmt.Errorf("journal: a state of %d bytes, expected at most %d", len(payload), MaxPayload)
	}
	if len(j.spans) == 0 { // the state names the journal: first it has to be there
		if _, err := j.flush(); err != nil {
			return err
		}
		if len(j.spans) == 0 {
			if err := j.write(nil, 1, 0); err != nil {
				return fmt.Errorf("journal: %w", err)
			}
		}
	}
	f, err := publish(j.folder, stateName, appendRecord(nil, ^j.seed, 1, 0, 1, payload))
	if err == nil {
		err = f.Close()
	}
	if err != nil {
		return fmt.Errorf("journal: %w", err)
	}
	return nil
}

// State returns the newest state, nil when there is none.
func (j *Journal) State() ([]byte, error) {
	b, err := readAll(j.folder, stateName, nil)
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, fmt.Errorf("journal: %w", err)
	}
	r, _, size, ok := parse(b, ^j.seed)
	if !ok || size != len(b) || r.Kind != 1 || r.Number != 1 {
		return nil, &Damage{stateName, 0, fmt.Sprintf("no state of journal %x", j.owner.ID[:4])}
	}
	return r.Payload, nil
}
