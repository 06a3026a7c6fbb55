package msgs

import (
	"bytes"
	"testing"

	"pgregory.net/rapid"
)

func pattern(n int, seed byte) []byte {
	b := make([]byte, n)
	for i := range b {
		b[i] = byte(i*7>>3) ^ seed
	}
	return b
}

func chunkSubject(slot Slot, n int) Subject { return Subject{Kind: KindSummary, Slot: slot, Chunk: n} }

var headSubject = Subject{Kind: KindSummary, Head: true}

func split(t interface {
	Helper()
	Fatal(...any)
}, payload []byte, version uint64, slot Slot) (chunks [][]byte, head []byte) {
	t.Helper()
	chunks, head, err := Split(payload, version, slot)
	if err != nil {
		t.Fatal(err)
	}
	return chunks, head
}

// Three large summaries go out in turn into the slots, the messages arrive in any order and some twice. What comes out is
// whole and never older than what came out before, and once all have arrived the newest has come out.
func TestChunksInAnyOrder(t *testing.T) {
	type arrival struct {
		subject Subject
		payload []byte
	}
	rapid.Check(t, func(t *rapid.T) {
		var all []arrival
		payloads := map[uint64][]byte{}
		slot := SlotA
		for version := uint64(1); version <= 3; version++ {
			size := rapid.SampledFrom([]int{1, ChunkSize, ChunkSize + 1, 3*ChunkSize - 1}).Draw(t, "size")
			payloads[version] = pattern(size, byte(version))
			chunks, head := split(t, payloads[version], version, slot)
			for n, c := range chunks {
				all = append(all, arrival{chunkSubject(slot, n), c})
			}
			all = append(all, arrival{headSubject, head})
			slot = slot.Other()
		}
		all = append(all, all[rapid.IntRange(0, len(all)-1).Draw(t, "again")])
		var a Assembler
		newest := uint64(0)
		for _, m := range rapid.Permutation(all).Draw(t, "order") {
			got, err := a.Accept(m.subject, m.payload)
			if err != nil {
				t.Fatal(err)
			}
			if got == nil {
				continue
			}
			version := uint64(0)
			for v, p := range payloads {
				if bytes.Equal(got, p) {
					version = v
				}
			}
			if version <= newest {
				t.Fatalf("version %d came out after %d", version, newest)
			}
			newest = version
		}
		if newest != 3 {
			t.Fatalf("the newest that came out is %d", newest)
		}
	})
}

func TestWrongChunksAreNoticed(t *testing.T) {
	chunks, head := split(t, pattern(2*ChunkSize, 0), 1, SlotA)
	forged, _ := split(t, pattern(2*ChunkSize, 1), 1, SlotA)
	var a Assembler
	for _, m := range []struct {
		s Subject
		b []byte
	}{{chunkSubject(SlotA, 0), chunks[0]}, {headSubject, head}} {
		if got, err := a.Accept(m.s, m.b); got != nil || err != nil {
			t.Fatal(len(got), err)
		}
	}
	_, err := a.Accept(chunkSubject(SlotA, 1), forged[1])
	wantError(t, "a forged chunk", err, "head.sha256")
	// Reading the head and the chunks again mends it.
	for n, c := range chunks {
		if got, err := a.Accept(chunkSubject(SlotA, n), c); got != nil || err != nil {
			t.Fatal(len(got), err)
		}
	}
	got, err := a.Accept(headSubject, head)
	if err != nil || !bytes.Equal(got, pattern(2*ChunkSize, 0)) {
		t.Fatalf("%d bytes, %v", len(got), err)
	}
}

func TestSmallSummaryPassesThrough(t *testing.T) {
	var a Assembler
	got, err := a.Accept(Subject{Kind: KindSummary}, []byte("whole"))
	if err != nil || string(got) != "whole" {
		t.Fatalf("%q, %v", got, err)
	}
	_, err = a.Accept(Subject{Kind: KindTie}, nil)
	wantError(t, "a tie", err, "a summary")
}

func TestChunkBounds(t *testing.T) {
	_, _, err := Split(nil, 1, SlotA)
	wantError(t, "nothing", err, "found 0")
	_, _, err = Split(make([]byte, MaxSummary+1), 1, SlotA)
	wantError(t, "too much", err, "found 8388609")
	_, _, err = Split([]byte{1}, 1, "c")
	wantError(t, "a third slot", err, "a or b")
	chunks, _ := split(t, make([]byte, MaxSummary), 1, SlotB)
	if len(chunks) != MaxChunks {
		t.Errorf("%d chunks", len(chunks))
	}
	for _, c := range chunks {
		if len(c) > ChunkSize+32 {
			t.Errorf("chunk of %d bytes", len(c))
		}
	}
	var a Assembler
	_, err = a.Accept(chunkSubject(SlotA, MaxChunks), chunks[0])
	wantError(t, "chunk 128", err, "0 to 127")
}
