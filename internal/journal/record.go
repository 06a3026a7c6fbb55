package journal

import (
	"encoding/binary"
	"hash/crc32"
)

// Record is one record. Numbers count from 1.
type Record struct {
	Number  uint64
	Kind    byte
	Payload []byte
}

const (
	// MaxPayload bounds a record, bytes.
	MaxPayload = 1 << 20

	preamble = 20        // bytes of a record before its payload
	maxBack  = 1<<24 - 1 // see the format
)

// What a mark says.
const (
	closed   = 0
	finished = 1
)

var castagnoli = crc32.MakeTable(crc32.Castagnoli)

// appendRecord writes a record; back is how many records back the newest durable one is.
func appendRecord(dst []byte, seed uint32, number, back uint64, kind byte, payload []byte) []byte {
	if back > maxBack {
		back = 0
	}
	at := len(dst)
	dst = binary.LittleEndian.AppendUint32(dst, 0)
	dst = binary.LittleEndian.AppendUint32(dst, uint32(len(payload)))
	dst = binary.LittleEndian.AppendUint64(dst, number)
	dst = append(dst, kind, byte(back), byte(back>>8), byte(back>>16))
	dst = append(dst, payload...)
	binary.LittleEndian.PutUint32(dst[at:], crc32.Update(seed, castagnoli, dst[at+4:]))
	return dst
}

// parse reads the record or mark at the start of b. It also returns the number up to which, by its word, all is durable.
func parse(b []byte, seed uint32) (r Record, durable uint64, size int, ok bool) {
	if len(b) < preamble {
		return r, 0, 0, false
	}
	length := binary.LittleEndian.Uint32(b[4:])
	if length > MaxPayload || int(length) > len(b)-preamble {
		return r, 0, 0, false
	}
	size = preamble + int(length)
	if binary.LittleEndian.Uint32(b) != crc32.Update(seed, castagnoli, b[4:size]) {
		return r, 0, 0, false
	}
	r = Record{Number: binary.LittleEndian.Uint64(b[8:]), Kind: b[16], Payload: b[preamble:size:size]}
	back := uint64(b[17]) | uint64(b[18])<<8 | uint64(b[19])<<16
	switch {
	case r.Kind == 0:
		if back != 0 || length != 1 || r.Payload[0] > finished {
			return r, 0, 0, false
		}
		durable = r.Number
	case back > r.Number:
		return r, 0, 0, false
	case back > 0:
		durable = r.Number - back
	}
	return r, durable, size, true
}

// walk reads records in order.
type walk struct {
	b        []byte
	seed     uint32
	at       int    // offset of the next record
	number   uint64 // of the record before it
	durable  uint64 // all up to here is, by the word of what was read
	finished bool
}

// next returns the next record, false where there is none: at the end of b, or where b is not as it was written.
func (w *walk) next() (Record, bool) {
	for !w.finished && w.at < len(w.b) {
		r, durable, size, ok := parse(w.b[w.at:], w.seed)
		mark := r.Kind == 0
		if !ok || mark && r.Number != w.number || !mark && r.Number != w.number+1 {
			return Record{}, false
		}
		w.at += size
		w.durable = max(w.durable, durable)
		if !mark {
			w.number = r.Number
			return r, true
		}
		w.finished = r.Payload[0] == finished
	}
	return Record{}, false
}

// damaged tells whether what follows, which is no record, was durable once: a whole record behind it says so.
func (w *walk) damaged() bool {
	most := w.number + uint64(len(w.b)/preamble) + 1
	for at := w.at + 1; at+preamble <= len(w.b); at++ {
		if n := binary.LittleEndian.Uint64(w.b[at+8:]); n <= w.number || n > most {
			continue
		}
		if _, durable, _, ok := parse(w.b[at:], w.seed); ok && durable > w.number {
			return true
		}
	}
	return false
}
