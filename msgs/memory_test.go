package msgs

import (
	"bytes"
	"math"
	"runtime"
	"testing"

	"google.golang.org/protobuf/proto"

	"selvage/msgs/internal/pb"
)

// No message makes its reader take more than a small multiple of its own size, whatever it claims. Each is the densest of
// its kind: the most elements for the fewest bytes.
func TestMemoryOfHostileMessages(t *testing.T) {
	header := &pb.Header{Fleet: "f", Robot: "r", Journal: make([]byte, 16)}
	part := func(n int) *pb.Part {
		p := &pb.Part{IdSteps: make([]uint64, n-1), Poses: make([]float64, 3*n), TravelM: make([]float32, n), StampSteps: make([]int64, n)}
		for i := range p.IdSteps {
			p.IdSteps[i] = 1
		}
		return p
	}
	pairs, resolved, wide := part(2), part(MaxResolved), part(MaxCliqueNodes)
	for range MaxCliques {
		pairs.Cliques = append(pairs.Cliques, 2, 0, 1)
	}
	pairs.Blocks = make([]float32, 9*MaxCliques)
	for i := range MaxResolved {
		resolved.ResolvedNodes = append(resolved.ResolvedNodes, uint32(i))
	}
	resolved.ResolvedOffsets = make([]int64, MaxResolved)
	d := 3 * (MaxCliqueNodes - 1)
	for range 27 {
		wide.Cliques = append(wide.Cliques, MaxCliqueNodes)
		for i := range MaxCliqueNodes {
			wide.Cliques = append(wide.Cliques, uint32(i))
		}
		wide.Blocks = append(wide.Blocks, make([]float32, triangle(d)+d)...)
	}
	summary := func(parts ...*pb.Part) []byte {
		b, err := proto.Marshal(&pb.Summary{Major: 1, Header: header, Dim: 3, Parts: parts})
		if err != nil {
			t.Fatal(err)
		}
		return b
	}
	want, err := proto.Marshal(&pb.Want{
		Major: 1, Fleet: "f", Robot: "r", Journal: make([]byte, 16), KeySessions: make([]uint32, MaxKeys), KeyByStamp: make([]bool, MaxKeys), KeySteps: make([]int64, MaxKeys),
	})
	if err != nil {
		t.Fatal(err)
	}
	for name, c := range map[string]struct {
		b      []byte
		read   func([]byte) error
		accept bool
	}{
		"pairs":       {summary(pairs), reads(DecodeSummary), true},
		"resolved":    {summary(resolved), reads(DecodeSummary), true},
		"wide":        {summary(wide), reads(DecodeSummary), true},
		"empty parts": {append([]byte{8, 1}, bytes.Repeat([]byte{8<<3 | 2, 0}, MaxSummary/2-1)...), reads(DecodeSummary), false},
		"keys":        {want, reads(DecodeWant), true},
	} {
		var before, after runtime.MemStats
		runtime.ReadMemStats(&before)
		err := c.read(c.b)
		runtime.ReadMemStats(&after)
		if (err == nil) != c.accept {
			t.Errorf("%s: %v", name, err)
		}
		// The worst are the keys of a want: 3 bytes each become 13 and then 56.
		factor := float64(after.TotalAlloc-before.TotalAlloc) / float64(len(c.b))
		if factor > 40 || math.IsNaN(factor) {
			t.Errorf("%s: %d bytes took %.0f times as many", name, len(c.b), factor)
		}
		t.Logf("%s: %d bytes, %.1f times as many to read", name, len(c.b), factor)
	}
}

func reads[T any](decode func([]byte) (*T, error)) func([]byte) error {
	return func(b []byte) error {
		_, err := decode(b)
		return err
	}
}
