package msgs

import (
	"fmt"
	"math/rand/v2"
	"testing"
)

// chain is a summary of n junctions in one part, with cliques of k neighbours, one starting at every junction that can.
func chain(dim, n, k int) *Summary {
	rng := rand.New(rand.NewPCG(5, 6))
	s := &Summary{Header: Header{Fleet: "site", Robot: "r1"}, Version: 1, Dim: dim, Parts: make([]Part, 1)}
	p := &s.Parts[0]
	for i := range n {
		p.Junctions = append(p.Junctions, Junction{
			ID: int64(i * 7), Pose: Pose{T: [3]float64{float64(i), 1, 0}, Q: [4]float64{0, 0, 0.6, 0.8}}, TravelM: float64(i), StampNS: 1_700_000_000_000_000_000 + int64(i)*3_141_592_653,
		})
	}
	for i := 0; i+k <= n; i++ {
		c := Clique{Nodes: make([]int, k), B: make([]float64, dim*(k-1))}
		for j := range c.Nodes {
			c.Nodes[j] = i + j
		}
		c.H = gram(rng, len(c.B), 2*len(c.B), 2)
		p.Cliques = append(p.Cliques, c)
	}
	return s
}

// The cost of a summary in bytes is the one the package comment states, within the envelope of a message.
func TestBytesOfASummary(t *testing.T) {
	const envelope = 128
	for _, dim := range []int{3, 6} {
		for _, k := range []int{2, 3, 5, 8} {
			const n = 500
			s := chain(dim, n, k)
			b, err := s.Marshal()
			if err != nil {
				t.Fatal(err)
			}
			d := dim * (k - 1)
			cliques := len(s.Parts[0].Cliques) * (4*(d*(d+1)/2+d) + 2*k + 1)
			junctions := n * (8*dim + 4 + 2 + 5)
			if limit := cliques + junctions + envelope; len(b) > limit {
				t.Errorf("dim %d, cliques of %d: %d bytes, want at most %d", dim, k, len(b), limit)
			}
			t.Logf("dim %d, cliques of %d: %.1f bytes a junction with its clique", dim, k, float64(len(b))/n)
		}
	}
}

func BenchmarkSummary(b *testing.B) {
	for _, k := range []int{2, 5} {
		s := chain(6, 500, k)
		payload, err := s.Marshal()
		if err != nil {
			b.Fatal(err)
		}
		b.Run(fmt.Sprintf("write/cliques of %d", k), func(b *testing.B) {
			b.SetBytes(int64(len(payload)))
			b.ReportAllocs()
			for b.Loop() {
				if _, err := s.Marshal(); err != nil {
					b.Fatal(err)
				}
			}
		})
		b.Run(fmt.Sprintf("read/cliques of %d", k), func(b *testing.B) {
			b.SetBytes(int64(len(payload)))
			b.ReportAllocs()
			for b.Loop() {
				if _, err := DecodeSummary(payload); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
