package journal

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"strings"
)

// Owner names a journal and whose it is.
type Owner struct {
	ID           [16]byte // random, new with every journal
	Fleet, Robot string   // at most 32 bytes each
}

// Damage is a place of a journal that is not as it was written.
type Damage struct {
	File   string
	Offset int64
	Why    string
}

func (d *Damage) Error() string {
	return fmt.Sprintf("%s is damaged at byte %d: %s; its files are left as they are", d.File, d.Offset, d.Why)
}

const (
	magic      = "SELVJRNL"
	version    = 1
	headerSize = 128
	maxName    = 32
)

// ErrVersion means that the journal was written by a version of this program that keeps it in another way.
var ErrVersion = errors.New("journal of another version")

// header is the beginning of a segment.
type header struct {
	owner   Owner
	first   uint64
	through uint64 // first to through were durable before the segment got its name
	ordinal uint64
}

func (h *header) bytes() []byte {
	b := make([]byte, headerSize)
	copy(b, magic)
	binary.LittleEndian.PutUint16(b[8:], version)
	copy(b[16:], h.owner.ID[:])
	binary.LittleEndian.PutUint64(b[32:], h.first)
	binary.LittleEndian.PutUint64(b[40:], h.through)
	binary.LittleEndian.PutUint64(b[48:], h.ordinal)
	for i, name := range [2]string{h.owner.Fleet, h.owner.Robot} {
		at := 56 + i*(maxName+1)
		b[at] = byte(len(name))
		copy(b[at+1:], name)
	}
	binary.LittleEndian.PutUint32(b[124:], crc32.Checksum(b[:124], castagnoli))
	return b
}

// readHeader reads the header of the segment with that name.
func readHeader(name string, b []byte) (h header, err error) {
	damage := func(at int64, why string) (header, error) { return header{}, &Damage{File: name, Offset: at, Why: why} }
	if len(b) < headerSize {
		return damage(int64(len(b)), fmt.Sprintf("%d bytes, expected a header of %d", len(b), headerSize))
	}
	if string(b[:8]) != magic {
		return damage(0, "no segment of a journal")
	}
	if binary.LittleEndian.Uint32(b[124:]) != crc32.Checksum(b[:124], castagnoli) {
		return damage(124, "the checksum of the header does not match")
	}
	if v := binary.LittleEndian.Uint16(b[8:]); v != version {
		return h, fmt.Errorf("%s: %w: found %d, expected %d", name, ErrVersion, v, version)
	}
	copy(h.owner.ID[:], b[16:])
	h.first, h.through = binary.LittleEndian.Uint64(b[32:]), binary.LittleEndian.Uint64(b[40:])
	h.ordinal = binary.LittleEndian.Uint64(b[48:])
	for i, to := range [2]*string{&h.owner.Fleet, &h.owner.Robot} {
		at := 56 + i*(maxName+1)
		if b[at] > maxName {
			return damage(int64(at), fmt.Sprintf("a name of %d bytes, expected at most %d", b[at], maxName))
		}
		*to = string(b[at+1 : at+1+int(b[at])])
	}
	if h.first == 0 || h.through < h.first-1 || !bytes.Equal(h.bytes(), b[:headerSize]) {
		return damage(0, "a header that is never written like this")
	}
	return h, nil
}

const suffix = ".seg"

func segmentName(ordinal uint64) string { return fmt.Sprintf("%08d%s", ordinal, suffix) }

// parseName returns the ordinal of a segment; false for other files.
func parseName(name string) (ordinal uint64, ok bool) {
	digits, ok := strings.CutSuffix(name, suffix)
	if !ok {
		return 0, false
	}
	for _, c := range digits {
		if c < '0' || c > '9' || ordinal > 1<<48 {
			return 0, false
		}
		ordinal = 10*ordinal + uint64(c-'0')
	}
	return ordinal, segmentName(ordinal) == name
}
