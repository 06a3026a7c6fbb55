package evidence

import (
	"math/bits"
	"slices"
)

// graph is an undirected graph as rows of bits.
type graph struct {
	n, words int
	rows     []uint64
}

func newGraph(n int) *graph {
	w := (n + 63) / 64
	return &graph{n, w, make([]uint64, n*w)}
}

func (g *graph) row(i int) []uint64 { return g.rows[i*g.words : (i+1)*g.words] }

func (g *graph) connect(i, j int) {
	g.row(i)[j>>6] |= 1 << (j & 63)
	g.row(j)[i>>6] |= 1 << (i & 63)
}

func (g *graph) connected(i, j int) bool { return g.row(i)[j>>6]>>(j&63)&1 == 1 }

// clique finds a largest set of mutually connected vertices among those allowed, ascending, by branch and bound with greedy
// colouring (Tomita, Seki, "An efficient branch-and-bound algorithm for finding a maximum clique", DMTCS 2003). It gives up
// after effort steps; exact tells whether it did not.
func (g *graph) clique(allowed []uint64, effort int) (best []int, exact bool) {
	s := search{g: g, effort: effort, left: make([]uint64, g.words), class: make([]uint64, g.words)}
	s.expand(append([]uint64(nil), allowed...), 0)
	slices.Sort(s.best)
	return s.best, s.effort >= 0
}

type search struct {
	g           *graph
	effort      int
	cur, best   []int
	candidates  [][]int // per depth, in colour order
	colours     [][]int
	set         [][]uint64 // per depth, what may still join
	left, class []uint64   // scratch of colour
}

func (s *search) expand(allowed []uint64, depth int) {
	if depth == len(s.candidates) {
		s.candidates = append(s.candidates, nil)
		s.colours = append(s.colours, nil)
		s.set = append(s.set, make([]uint64, s.g.words))
	}
	s.colour(allowed, depth)
	order := s.candidates[depth]
	for k := len(order) - 1; k >= 0; k-- {
		if len(s.cur)+s.colours[depth][k] <= len(s.best) {
			return
		}
		if s.effort--; s.effort < 0 {
			return
		}
		v := order[k]
		s.cur = append(s.cur, v)
		next := s.set[depth]
		any := uint64(0)
		row := s.g.row(v)
		for w := range next {
			next[w] = allowed[w] & row[w]
			any |= next[w]
		}
		if any != 0 {
			s.expand(next, depth+1)
		} else if len(s.cur) > len(s.best) {
			s.best = append(s.best[:0], s.cur...)
		}
		s.cur = s.cur[:len(s.cur)-1]
		allowed[v>>6] &^= 1 << (v & 63)
	}
}

// colour orders the allowed vertices by greedy colour classes: no clique holds two vertices of one class.
func (s *search) colour(allowed []uint64, depth int) {
	order, colours := s.candidates[depth][:0], s.colours[depth][:0]
	left, class := s.left[:s.g.words], s.class[:s.g.words]
	copy(left, allowed)
	for c := 1; ; c++ {
		any := uint64(0)
		for w := range left {
			class[w] = left[w]
			any |= left[w]
		}
		if any == 0 {
			break
		}
		for w := 0; w < len(class); w++ {
			for class[w] != 0 {
				b := bits.TrailingZeros64(class[w])
				v := w<<6 | b
				left[w] &^= 1 << b
				class[w] &^= 1 << b
				row := s.g.row(v)
				for x := w; x < len(class); x++ {
					class[x] &^= row[x]
				}
				order = append(order, v)
				colours = append(colours, c)
			}
		}
	}
	s.candidates[depth], s.colours[depth] = order, colours
}
