package journal

import (
	"bytes"
	"cmp"
	"errors"
	"fmt"
	"hash/crc32"
	"slices"
)

// span is a segment and the first record that it is read for; it is read up to the next span's.
type span struct {
	name  string
	first uint64
}

// limits of a journal, bytes; tests take smaller ones.
type limits struct {
	segment int // a segment that has as many is not written on
	held    int // a journal that holds more than so many that are not durable takes no record
}

var usual = limits{segment: 4 << 20, held: 16 << 20}

// maxFile bounds what is read: a segment that was just below its limit, and all that could be waiting.
const maxFile = 64 << 20

// Open opens the journal in a folder, or begins one there when there is none. The id counts for a new one only; fleet and robot
// of an old one must be the same. It validates all that is there.
//
// The error is a *Damage, ErrInUse, ErrVersion, or whatever the disk says.
func Open(d Folder, owner Owner) (*Journal, error) { return open(d, owner, usual) }

func open(d Folder, owner Owner, l limits) (*Journal, error) {
	switch {
	case owner.ID == [16]byte{}:
		return nil, errors.New("journal: no id was given")
	case len(owner.Fleet) > maxName || len(owner.Robot) > maxName:
		return nil, fmt.Errorf("journal: fleet %q and robot %q: expected at most %d bytes", owner.Fleet, owner.Robot, maxName)
	}
	release, err := d.Lock()
	if err != nil {
		return nil, fmt.Errorf("journal: %w", err)
	}
	j := &Journal{folder: d, owner: owner, limits: l, release: release}
	if err := j.load(); err != nil {
		return nil, errors.Join(fmt.Errorf("journal: %w", err), release())
	}
	return j, nil
}

// load reads what the folder has.
func (j *Journal) load() error {
	names, err := j.folder.List()
	if err != nil {
		return err
	}
	var headers []header
	for _, name := range names {
		ordinal, ok := parseName(name)
		if !ok {
			continue
		}
		h, err := j.header(name, ordinal)
		if err != nil {
			return err
		}
		headers = append(headers, h)
	}
	slices.SortFunc(headers, func(a, b header) int { return cmp.Compare(a.ordinal, b.ordinal) })
	if len(headers) > 0 {
		found := headers[0].owner
		if found.Fleet != j.owner.Fleet || found.Robot != j.owner.Robot {
			return fmt.Errorf("it belongs to robot %q of fleet %q, expected %q of %q", found.Robot, found.Fleet, j.owner.Robot, j.owner.Fleet)
		}
		j.owner = found
	}
	j.seed = crc32.Checksum(j.owner.ID[:], castagnoli)
	var buf []byte
	for i, h := range headers {
		name := segmentName(h.ordinal)
		switch {
		case h.owner != j.owner:
			return &Damage{name, 16, "a segment of another journal than " + segmentName(headers[0].ordinal)}
		case h.first > j.last+1:
			return &Damage{name, 32, fmt.Sprintf("it begins with record %d, and %d to %d are missing", h.first, j.last+1, h.first-1)}
		case h.first <= j.durable:
			return &Damage{name, 32, fmt.Sprintf("it begins with record %d, expected more than %d", h.first, j.durable)}
		}
		if buf, err = readAll(j.folder, name, buf); err != nil {
			return err
		}
		if i+1 < len(headers) {
			err = j.older(name, buf, h.first, headers[i+1].first)
		} else {
			err = j.newest(name, buf, &h)
		}
		if err != nil {
			return err
		}
		j.spans = append(j.spans, span{name, h.first})
		j.ordinal = h.ordinal
	}
	return nil
}

func (j *Journal) header(name string, ordinal uint64) (h header, err error) {
	f, err := j.folder.Open(name)
	if err != nil {
		return h, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	size, err := f.Size()
	if err != nil {
		return h, fmt.Errorf("%s: %w", name, err)
	}
	b := make([]byte, min(size, headerSize))
	if err := readFull(f, b); err != nil {
		return h, fmt.Errorf("%s: header: %w", name, err)
	}
	if h, err = readHeader(name, b); err == nil && h.ordinal != ordinal {
		err = &Damage{name, 48, fmt.Sprintf("its ordinal is %d, expected that of its name", h.ordinal)}
	}
	return h, err
}

// older reads a segment that is not the newest, up to the record where the next takes its place.
func (j *Journal) older(name string, b []byte, first, next uint64) error {
	w := walk{b: b, seed: j.seed, at: headerSize, number: first - 1}
	for w.number+1 < next {
		if _, ok := w.next(); !ok {
			if w.at == len(b) {
				return &Damage{name, int64(w.at), fmt.Sprintf("it ends with record %d, and %d to %d are missing", w.number, w.number+1, next-1)}
			}
			return &Damage{name, int64(w.at), fmt.Sprintf("no record %d, which was durable", w.number+1)}
		}
	}
	j.last, j.durable = w.number, w.number
	return nil
}

// newest reads the newest segment, and keeps the records that may not be durable for the next one. Those that it had when it got its
// name are: what may be missing on the disk is the name.
func (j *Journal) newest(name string, b []byte, h *header) error {
	w := walk{b: b, seed: j.seed, at: headerSize, number: h.first - 1, durable: h.first - 1}
	for _, ok := w.next(); ok; _, ok = w.next() {
	}
	if w.number < h.through || w.damaged() {
		return &Damage{name, int64(w.at), fmt.Sprintf("no record %d, which was durable", w.number+1)}
	}
	j.last, j.durable, j.finished = w.number, w.durable, w.finished
	j.torn = int64(len(b) - w.at)
	if w.durable == w.number {
		return nil
	}
	again := walk{b: b, seed: j.seed, at: headerSize, number: h.first - 1}
	for again.number < w.durable {
		again.next()
	}
	j.held, j.heldTo = bytes.Clone(b[again.at:w.at]), w.number
	j.waiting = len(j.held)
	return nil
}
