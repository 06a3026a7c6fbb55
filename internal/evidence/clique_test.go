package evidence

import (
	"math/bits"
	"math/rand/v2"
	"slices"
	"testing"
)

func everyone(n int) []uint64 {
	all := make([]uint64, (n+63)/64)
	for i := 0; i < n; i++ {
		all[i>>6] |= 1 << (i & 63)
	}
	return all
}

// The search must find a set as large as trying all subsets does, among the allowed vertices only.
func TestCliqueAgainstAllSubsets(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	sizes := map[int]bool{}
	for run := 0; run < 500; run++ {
		n := 1 + rng.IntN(14)
		density := rng.Float64()
		g := newGraph(n)
		for i := 0; i < n; i++ {
			for j := 0; j < i; j++ {
				if rng.Float64() < density {
					g.connect(i, j)
				}
			}
		}
		allowed := rng.Uint64() & (1<<n - 1)
		want := 0
		for set := uint64(0); set < 1<<n; set++ {
			if set&^allowed != 0 || bits.OnesCount64(set) <= want {
				continue
			}
			whole := true
			for i := 0; i < n && whole; i++ {
				if set>>i&1 == 1 {
					rest := set &^ (1 << i)
					whole = g.row(i)[0]&rest == rest
				}
			}
			if whole {
				want = bits.OnesCount64(set)
			}
		}
		got, exact := g.clique([]uint64{allowed}, 1<<30)
		if !exact || len(got) != want || !slices.IsSorted(got) {
			t.Fatalf("run %d: %v (exact %v), want %d vertices", run, got, exact, want)
		}
		for i, v := range got {
			if allowed>>v&1 == 0 {
				t.Fatalf("run %d: vertex %d is not allowed", run, v)
			}
			for _, w := range got[:i] {
				if !g.connected(v, w) {
					t.Fatalf("run %d: %d and %d are not connected", run, v, w)
				}
			}
		}
		sizes[want] = true
	}
	if len(sizes) < 8 {
		t.Errorf("only %d different sizes were tried", len(sizes))
	}
}

// A hundred and fifty vertices, with a planted clique of 30 among sparse others, over more than two words.
func TestCliquePlanted(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	const n, k = 150, 30
	g := newGraph(n)
	members := rng.Perm(n)[:k]
	for i := 0; i < n; i++ {
		for j := 0; j < i; j++ {
			if rng.Float64() < .2 {
				g.connect(i, j)
			}
		}
	}
	for i, v := range members {
		for _, w := range members[:i] {
			g.connect(v, w)
		}
	}
	slices.Sort(members)
	got, exact := g.clique(everyone(n), 1<<30)
	if !exact || !slices.Equal(got, members) {
		t.Errorf("found %v (exact %v), want %v", got, exact, members)
	}
	if _, exact := g.clique(everyone(n), 3); exact {
		t.Error("three steps cannot be enough, but the search says they were")
	}
}
