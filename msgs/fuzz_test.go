package msgs

import (
	"testing"

	"github.com/google/go-cmp/cmp"
)

// fuzz asks of a decoder that it never panics, and that what it accepts can be written and read again unchanged.
func fuzz[T any](f *testing.F, decode func([]byte) (*T, error)) {
	for _, m := range examples() {
		if _, ok := m.value.(any).(*T); ok {
			b, err := m.value.Marshal()
			if err != nil {
				f.Fatal(err)
			}
			f.Add(b)
		}
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		x, err := decode(b)
		if err != nil {
			return
		}
		again, err := any(x).(interface{ Marshal() ([]byte, error) }).Marshal()
		if err != nil {
			t.Fatalf("accepted, but cannot be written: %v", err)
		}
		y, err := decode(again)
		if err != nil {
			t.Fatalf("accepted, but refused when written again: %v", err)
		}
		if d := cmp.Diff(x, y, asSent); d != "" {
			t.Fatalf("-first +second\n%s", d)
		}
		if !sameMatrices(x, y) {
			t.Fatalf("first %+v, second %+v", x, y)
		}
	})
}

func FuzzDecodeHeartbeat(f *testing.F)  { fuzz(f, DecodeHeartbeat) }
func FuzzDecodeTie(f *testing.F)        { fuzz(f, DecodeTie) }
func FuzzDecodeSummary(f *testing.F)    { fuzz(f, DecodeSummary) }
func FuzzDecodeWant(f *testing.F)       { fuzz(f, DecodeWant) }
func FuzzDecodeCorrection(f *testing.F) { fuzz(f, DecodeCorrection) }
func FuzzDecodeVerdict(f *testing.F)    { fuzz(f, DecodeVerdict) }
func FuzzDecodeLease(f *testing.F)      { fuzz(f, DecodeLease) }
func FuzzDecodeRuling(f *testing.F)     { fuzz(f, DecodeRuling) }

func FuzzParseSubject(f *testing.F) {
	for _, s := range subjects {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		sub, err := ParseSubject(s)
		if err == nil && rebuild(sub) != s {
			t.Fatalf("%q was taken for %+v", s, sub)
		}
	})
}

// The assembler meets messages in an order that the input chooses, some of them spoilt.
func FuzzAssembler(f *testing.F) {
	payload := make([]byte, 3*ChunkSize/2)
	for i := range payload {
		payload[i] = byte(i * i >> 7)
	}
	chunks, head, err := Split(payload, 5, SlotA)
	if err != nil {
		f.Fatal(err)
	}
	f.Add([]byte{0, 1, 2}, head)
	f.Add([]byte{2, 1, 1, 3, 0}, chunks[1])
	f.Fuzz(func(t *testing.T, order, extra []byte) {
		var a Assembler
		for _, o := range order {
			var got []byte
			switch o % 5 {
			case 0, 1:
				got, _ = a.Accept(Subject{Kind: KindSummary, Slot: SlotA, Chunk: int(o % 5)}, chunks[o%5])
			case 2:
				got, _ = a.Accept(Subject{Kind: KindSummary, Head: true}, head)
			case 3:
				got, _ = a.Accept(Subject{Kind: KindSummary, Slot: SlotB, Chunk: int(o)}, extra)
			case 4:
				got, _ = a.Accept(Subject{Kind: KindSummary, Head: true}, extra)
			}
			if got != nil && o%5 < 2 && string(got) != string(payload) {
				t.Fatal("another payload came out")
			}
		}
	})
}
