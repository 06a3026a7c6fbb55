package sparse

import "fmt"

// Pattern is the block structure of a symmetric matrix. Diagonal blocks are
// always present.
type Pattern struct {
	// Dims holds the number of scalars of each block row: 3 or 6.
	Dims []int
	// Pairs lists the off-diagonal blocks, each unordered pair at most once.
	// Off(k) is the block in row Pairs[k][0] and column Pairs[k][1].
	Pairs [][2]int32
}

// Ordering selects the elimination order.
type Ordering int

const (
	// Auto takes minimum degree, and nested dissection instead where the saving
	// over about ten factorisations outweighs the time to find it.
	Auto Ordering = iota
	MinimumDegree
	NestedDissection
)

// Options of Analyse. The zero value is a good choice.
type Options struct {
	// Last names block rows to be eliminated last, together: their trailing
	// Schur complement can be read off (see Factor.SchurLast). They form one
	// dense front, so a few hundred are fine and thousands are not.
	Last     []int32
	Ordering Ordering
	// Workers is the number of goroutines of a factorisation, 1 or 2; 0 means 1.
	// Two pay where two processors are free; small problems use one in any case.
	Workers int
}

const (
	maxScalars = 1 << 27
	maxNumbers = 1 << 31 // of factor and stacks: 16 GiB
)

// graph is an undirected graph in compressed rows, each edge in both directions,
// with vertex weights in units of three scalars.
type graph struct {
	ptr, adj []int32
	weight   []int32
}

func (g *graph) order() int { return len(g.weight) }

func (g *graph) neighbours(i int32) []int32 { return g.adj[g.ptr[i]:g.ptr[i+1]] }

// fill sets ptr and adj, which are zero and long enough, from a list of edges.
func (g *graph) fill(edges [][2]int32) {
	for _, q := range edges {
		g.ptr[q[0]+1]++
		g.ptr[q[1]+1]++
	}
	for i := range g.weight {
		g.ptr[i+1] += g.ptr[i]
	}
	next := append([]int32(nil), g.ptr...)
	for _, q := range edges {
		g.adj[next[q[0]]] = q[1]
		next[q[0]]++
		g.adj[next[q[1]]] = q[0]
		next[q[1]]++
	}
}

// newGraph checks p and turns it into a graph.
func newGraph(p Pattern) (*graph, error) {
	n := len(p.Dims)
	g := &graph{ptr: make([]int32, n+1), adj: make([]int32, 2*len(p.Pairs)), weight: make([]int32, n)}
	total := 0
	for i, d := range p.Dims {
		if d != 3 && d != 6 {
			return nil, fmt.Errorf("sparse: block row %d has %d scalars, want 3 or 6", i, d)
		}
		g.weight[i] = int32(d / 3)
		total += d
	}
	if total > maxScalars || len(p.Pairs) > maxScalars/6 {
		return nil, fmt.Errorf("sparse: %d scalars and %d blocks exceed the size this package handles", total, len(p.Pairs))
	}
	for k, q := range p.Pairs {
		if q[0] < 0 || q[1] < 0 || int(q[0]) >= n || int(q[1]) >= n || q[0] == q[1] {
			return nil, fmt.Errorf("sparse: pair %d is (%d, %d), want two different block rows below %d", k, q[0], q[1], n)
		}
	}
	g.fill(p.Pairs)
	seen := make([]int32, n) // seen[j] == i+1 once j was met in row i
	for i := range int32(n) {
		for _, j := range g.neighbours(i) {
			if seen[j] == i+1 {
				return nil, fmt.Errorf("sparse: the pair of block rows %d and %d is listed twice", i, j)
			}
			seen[j] = i + 1
		}
	}
	return g, nil
}

// checkLast returns the membership of o.Last.
func checkLast(n int, o Options) ([]bool, error) {
	in := make([]bool, n)
	for k, i := range o.Last {
		if i < 0 || int(i) >= n {
			return nil, fmt.Errorf("sparse: last[%d] is %d, want a block row below %d", k, i, n)
		}
		if in[i] {
			return nil, fmt.Errorf("sparse: block row %d is listed twice as last", i)
		}
		in[i] = true
	}
	return in, nil
}
