package partition

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"
)

// greedy is the junction rule spelled out: every delta computed anew before every step, sizes counted over all terms, no early
// stop. It returns junctions, terms and bytes of one connected graph.
func greedy(dim, n int, pairs [][]int32, separators []int32) (junctions []int32, terms [][]int32, bytes int) {
	alive := all(n)
	terms = merge(pairs)
	size := func(alive []int32, terms [][]int32) int {
		b := PoseBytes * len(alive)
		for _, t := range terms {
			b += CliqueBytes(dim, len(t))
		}
		return b
	}
	junctions, bytes = alive, size(alive, terms)
	best := terms
	for len(alive) > 1 {
		var nextAlive []int32
		var nextTerms [][]int32
		least := 0
		for _, v := range alive {
			if slices.Contains(separators, v) {
				continue
			}
			var clique []int32
			var rest [][]int32
			for _, t := range terms {
				if slices.Contains(t, v) {
					clique = append(clique, t...)
				} else {
					rest = append(rest, t)
				}
			}
			slices.Sort(clique)
			clique = slices.DeleteFunc(slices.Compact(clique), func(u int32) bool { return u == v })
			rest = merge(append(rest, clique))
			left := slices.DeleteFunc(slices.Clone(alive), func(u int32) bool { return u == v })
			if s := size(left, rest); nextAlive == nil || s < least {
				nextAlive, nextTerms, least = left, rest, s
			}
		}
		if nextAlive == nil {
			break
		}
		alive, terms = nextAlive, nextTerms
		if least <= bytes {
			junctions, best, bytes = alive, terms, least
		}
	}
	slices.SortFunc(best, slices.Compare)
	return junctions, best, bytes
}

// merge drops the sets that lie inside another, and those of one pose.
func merge(sets [][]int32) (out [][]int32) {
	for i, s := range sets {
		inside := len(s) < 2
		for j, t := range sets {
			if i == j || len(s) == len(t) && i < j && slices.Equal(s, t) {
				continue
			}
			held := true
			for _, v := range s {
				held = held && slices.Contains(t, v)
			}
			inside = inside || held
		}
		if !inside {
			out = append(out, s)
		}
	}
	return out
}

func TestJunctionsFollowTheRule(t *testing.T) {
	extra := map[int]int{} // how many graphs keep so many poses that are no separators
	for seed := uint64(0); seed < 400; seed++ {
		rng := rand.New(rand.NewPCG(seed, 11))
		n := 2 + rng.IntN(30)
		dim := 3 + 3*rng.IntN(2)
		closures := rng.IntN(2*n + 1)
		local := rng.IntN(2) == 0
		share := []float64{0, .1, .3, .6}[rng.IntN(4)]
		var terms [][]int32
		for v := int32(1); int(v) < n; v++ {
			terms = append(terms, []int32{v - 1, v})
		}
		for i := 0; i < closures; i++ {
			v := rng.IntN(n)
			w := rng.IntN(n)
			if local {
				w = max(0, min(n-1, v+rng.IntN(11)-5))
			}
			if v != w {
				terms = append(terms, []int32{int32(min(v, w)), int32(max(v, w))})
			}
		}
		if n > 4 && rng.IntN(3) == 0 { // terms over more than two poses
			terms = append(terms, []int32{0, 2, 3}, []int32{2, 3})
		}
		var separators []int32
		for v := 0; v < n; v++ {
			if rng.Float64() < share {
				separators = append(separators, int32(v))
			}
		}
		quadratics := make([]Quadratic, len(terms))
		for i := range terms {
			quadratics[i] = relative(dim, terms[i], rng)
		}
		c, err := Condense(dim, n, quadratics, separators)
		if err != nil {
			t.Fatal(err)
		}
		junctions, cliques, bytes := greedy(dim, n, terms, separators)
		got := make([][]int32, len(c.Cliques))
		for i := range got {
			got[i] = c.Cliques[i].Nodes
		}
		if c.Bytes != bytes || !slices.Equal(c.Junctions, junctions) || fmt.Sprint(got) != fmt.Sprint(cliques) {
			t.Fatalf("seed %d: %d bytes, junctions %v, cliques %v\nexpected %d, %v, %v", seed, c.Bytes, c.Junctions, got, bytes, junctions, cliques)
		}
		extra[len(junctions)-len(separators)]++
	}
	if len(extra) < 6 {
		t.Errorf("the graphs need too few extra junctions to prove anything: %v", extra)
	}
	t.Log("extra junctions: graphs", extra)
}

// relative returns a term that fixes its poses against each other, all at the identity.
func relative(dim int, nodes []int32, rng *rand.Rand) Quadratic {
	d := dim * len(nodes)
	q := Quadratic{Nodes: nodes, H: make([]float64, d*d), B: make([]float64, d)}
	for k := 1; k < len(nodes); k++ {
		for j := 0; j < dim; j++ {
			w := 1 + rng.Float64()
			a, b := (k-1)*dim+j, k*dim+j
			q.H[a*d+a] += w
			q.H[b*d+b] += w
			q.H[a*d+b] -= w
			q.H[b*d+a] -= w
		}
	}
	return q
}
