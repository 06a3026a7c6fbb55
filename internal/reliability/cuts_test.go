package reliability

import (
	"fmt"
	"math/rand/v2"
	"testing"
)

// parts counts the connected components without some edges.
func parts(nodes int, edges [][2]int32, without ...int) int {
	group := make([]int, nodes)
	for i := range group {
		group[i] = i
	}
	count := nodes
	for k, e := range edges {
		skip := false
		for _, w := range without {
			skip = skip || w == k
		}
		a, b := group[e[0]], group[e[1]]
		if skip || a == b {
			continue
		}
		count--
		for i := range group {
			if group[i] == b {
				group[i] = a
			}
		}
	}
	return count
}

// Bridges and cut pairs by taking edges away, on random graphs with parallel edges and several components.
func TestCuts(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	pairs, bridges := 0, 0
	for range 300 {
		nodes := 2 + r.IntN(9)
		var edges [][2]int32
		for range r.IntN(2 * nodes) {
			a, b := int32(r.IntN(nodes)), int32(r.IntN(nodes))
			if a != b {
				edges = append(edges, [2]int32{a, b})
			}
		}
		class := Cuts(nodes, edges)
		whole := parts(nodes, edges)
		for i := range edges {
			bridge := parts(nodes, edges, i) > whole
			if (class[i] == 0) != bridge {
				t.Fatalf("edge %d of %v: class %d, bridge %v", i, edges, class[i], bridge)
			}
			if bridge {
				bridges++
				continue
			}
			for j := range i {
				if class[j] == 0 {
					continue
				}
				pair := parts(nodes, edges, i, j) > whole
				if (class[i] == class[j]) != pair {
					t.Fatalf("edges %d and %d of %v: classes %d and %d, cut %v", i, j, edges, class[i], class[j], pair)
				}
				if pair {
					pairs++
				}
			}
		}
	}
	if pairs < 100 || bridges < 100 {
		t.Errorf("only %d pairs and %d bridges met", pairs, bridges)
	}
}

func TestCutsNumbering(t *testing.T) {
	// A triangle, a double edge and a bridge between them.
	edges := [][2]int32{{2, 3}, {0, 1}, {1, 2}, {3, 4}, {2, 0}, {4, 3}}
	if got := fmt.Sprint(Cuts(5, edges)); got != "[0 1 1 2 1 2]" {
		t.Errorf("classes %s", got)
	}
	if got := Cuts(0, nil); len(got) != 0 {
		t.Errorf("classes of nothing: %v", got)
	}
}

func BenchmarkCuts(b *testing.B) {
	r := rand.New(rand.NewPCG(1, 2))
	const nodes = 100_000
	var edges [][2]int32
	for v := range int32(nodes - 1) {
		edges = append(edges, [2]int32{v, v + 1})
		if v%10 == 5 {
			edges = append(edges, [2]int32{v, int32(r.IntN(int(v)))})
		}
	}
	for b.Loop() {
		Cuts(nodes, edges)
	}
}
