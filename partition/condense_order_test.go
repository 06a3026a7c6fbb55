package partition

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// greedy is the junction rule spelled out: every delta computed anew before every step, sizes counted over all terms, no early
// stop. It returns junctions, terms and bytes of one connected graph.
func greedy(width, n int, pairs [][]int32, separators []int32) (junctions []int32, terms [][]int32, bytes int) {
	alive := all(n)
	terms = merge(pairs)
	size := func(alive []int32, terms [][]int32) int {
		b := PoseBytes * len(alive)
		for _, t := range terms {
			b += CliqueBytes(width, len(t))
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
	seen := map[int]int{} // how many junctions that are no separators
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(2, 30).Draw(t, "n")
		width := 3 * rapid.IntRange(1, 2).Draw(t, "width")
		rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "seed"), 0))
		closures := rapid.IntRange(0, 2*n).Draw(t, "closures")
		local := rapid.Bool().Draw(t, "local")
		share := rapid.SampledFrom([]float64{0, .1, .3, .6}).Draw(t, "separators")
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
			quadratics[i] = relative(width, terms[i], rng)
		}
		c, err := Condense(width/3+1, n, quadratics, separators)
		if err != nil {
			t.Fatal(err)
		}
		junctions, cliques, bytes := greedy(width, n, terms, separators)
		got := make([][]int32, len(c.Cliques))
		for i := range got {
			got[i] = c.Cliques[i].Nodes
		}
		if c.Bytes != bytes || !slices.Equal(c.Junctions, junctions) || fmt.Sprint(got) != fmt.Sprint(cliques) {
			t.Fatalf("%d bytes, junctions %v, cliques %v\nexpected %d, %v, %v", c.Bytes, c.Junctions, got, bytes, junctions, cliques)
		}
		seen[len(junctions)-len(separators)]++
	})
	if len(seen) < 4 {
		t.Errorf("the drawn graphs need too few extra junctions to prove anything: %v", seen)
	}
}

// relative returns a term that fixes its poses against each other, all at the identity.
func relative(width int, nodes []int32, rng *rand.Rand) Quadratic {
	d := width * len(nodes)
	q := Quadratic{Nodes: nodes, H: make([]float64, d*d), B: make([]float64, d)}
	for k := 1; k < len(nodes); k++ {
		for j := 0; j < width; j++ {
			w := 1 + rng.Float64()
			a, b := (k-1)*width+j, k*width+j
			q.H[a*d+a] += w
			q.H[b*d+b] += w
			q.H[a*d+b] -= w
			q.H[b*d+a] -= w
		}
	}
	return q
}
