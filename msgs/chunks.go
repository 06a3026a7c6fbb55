package msgs

import (
	"crypto/sha256"
	"maps"

	"selvage/msgs/internal/pb"
)

// A summary above ChunkAbove bytes is published in chunks of ChunkSize, so that other messages of a slow link get between.
const (
	ChunkAbove = 256 << 10
	ChunkSize  = 64 << 10
	MaxChunks  = MaxSummary / ChunkSize
)

// Slot is one of the two places a robot writes chunks to in turn: while it fills one, the other still holds what the head
// on the bus speaks of.
type Slot string

// The slots.
const (
	SlotA Slot = "a"
	SlotB Slot = "b"
)

func (s Slot) valid() bool { return s == SlotA || s == SlotB }

// Other is the slot to use next.
func (s Slot) Other() Slot {
	if s == SlotA {
		return SlotB
	}
	return SlotA
}

// Split cuts an encoded summary into chunks and the head that is to be published when all of them are stored.
func Split(payload []byte, version uint64, slot Slot) (chunks [][]byte, head []byte, err error) {
	if len(payload) == 0 || len(payload) > MaxSummary {
		return nil, nil, ofKind(KindSummary, wrong("message", len(payload), "1 to %d bytes", MaxSummary))
	}
	if !slot.valid() {
		return nil, nil, ofKind(KindSummary, wrong("slot", clip(string(slot)), "a or b"))
	}
	for at := 0; at < len(payload); at += ChunkSize {
		b, err := seal(KindSummary, &pb.SummaryChunk{
			Major: Major, Minor: Minor, Version: version, Data: payload[at:min(at+ChunkSize, len(payload))],
		}, nil, 2*ChunkSize)
		if err != nil {
			return nil, nil, err
		}
		chunks = append(chunks, b)
	}
	sum := sha256.Sum256(payload)
	head, err = seal(KindSummary, &pb.SummaryHead{
		Major: Major, Minor: Minor, Version: version, Slot: string(slot), Count: uint32(len(chunks)),
		Size: uint64(len(payload)), Sha256: sum[:],
	}, nil, MaxSmall)
	return chunks, head, err
}

// Assembler puts the summaries of one robot together again. It takes the messages of the summary subjects in any order, as
// often as they come, and follows the newest head only.
//
// It holds at most the chunks of both slots, 2 MaxSummary bytes. Versions only rise within a journal; a robot that comes
// with a new one needs a new assembler.
type Assembler struct {
	slots map[Slot]map[int]chunk
	head  *pb.SummaryHead // the newest, until its summary is complete
	done  uint64          // version of the newest summary put together
}

type chunk struct {
	version uint64
	data    []byte
}

// Accept takes one message. It returns the encoded summary when the message completes one or is one itself, and nil when
// more is to come. After an error about a checksum the head and the chunks should be read again.
func (a *Assembler) Accept(s Subject, b []byte) ([]byte, error) {
	switch {
	case s.Kind != KindSummary:
		return nil, &FieldError{Kind: s.Kind, Field: "subject", Found: "another kind", Want: "a summary"}
	case s.Head:
		return a.acceptHead(b)
	case s.Slot != "":
		return a.acceptChunk(s.Slot, s.Chunk, b)
	}
	return b, nil
}

func (a *Assembler) acceptChunk(slot Slot, n int, b []byte) ([]byte, error) {
	var m pb.SummaryChunk
	if err := open(KindSummary, b, &m, 2*ChunkSize, 0); err != nil {
		return nil, err
	}
	if len(m.Data) == 0 || len(m.Data) > ChunkSize {
		return nil, ofKind(KindSummary, wrong("data", len(m.Data), "1 to %d bytes", ChunkSize))
	}
	if !slot.valid() || n < 0 || n >= MaxChunks {
		return nil, ofKind(KindSummary, wrong("chunk", n, "0 to %d in slot a or b", MaxChunks-1))
	}
	if a.slots == nil {
		a.slots = map[Slot]map[int]chunk{SlotA: {}, SlotB: {}}
	}
	if m.Version <= a.done || m.Version < a.slots[slot][n].version {
		return nil, nil
	}
	a.slots[slot][n] = chunk{m.Version, m.Data}
	if a.head == nil || a.head.Version != m.Version {
		return nil, nil
	}
	return a.assemble()
}

func (a *Assembler) acceptHead(b []byte) ([]byte, error) {
	var m pb.SummaryHead
	if err := open(KindSummary, b, &m, MaxSmall, 0); err != nil {
		return nil, err
	}
	var err error
	switch {
	case !Slot(m.Slot).valid():
		err = wrong("head.slot", clip(m.Slot), "a or b")
	case m.Size == 0 || m.Size > MaxSummary:
		err = wrong("head.size", m.Size, "1 to %d bytes", MaxSummary)
	case uint64(m.Count) != (m.Size+ChunkSize-1)/ChunkSize:
		err = wrong("head.count", m.Count, "%d chunks for %d bytes", (m.Size+ChunkSize-1)/ChunkSize, m.Size)
	case len(m.Sha256) != sha256.Size:
		err = wrong("head.sha256", len(m.Sha256), "%d bytes", sha256.Size)
	}
	if err != nil {
		return nil, ofKind(KindSummary, err)
	}
	if m.Version <= a.done || a.head != nil && m.Version <= a.head.Version {
		return nil, nil
	}
	a.head = &m
	return a.assemble()
}

// assemble joins the chunks of the head when all are there, and forgets them.
func (a *Assembler) assemble() ([]byte, error) {
	h, slot := a.head, a.slots[Slot(a.head.Slot)]
	for n := range int(h.Count) {
		if c, ok := slot[n]; !ok || c.version != h.Version {
			return nil, nil
		}
	}
	payload := make([]byte, 0, h.Size)
	for n := range int(h.Count) {
		payload = append(payload, slot[n].data...)
	}
	a.head = nil
	maps.DeleteFunc(slot, func(_ int, c chunk) bool { return c.version <= h.Version })
	if sum := sha256.Sum256(payload); uint64(len(payload)) != h.Size || string(sum[:]) != string(h.Sha256) {
		return nil, ofKind(KindSummary, wrong("head.sha256", "chunks that do not match it", "%d bytes with that checksum", h.Size))
	}
	a.done = h.Version
	return payload, nil
}
