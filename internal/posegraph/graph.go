package posegraph

import (
	"fmt"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// Values are the present estimates of all variables.
type Values struct {
	Poses  []lie.SE3
	Points [][3]float64 // marks, in the frame of the poses; they are numbered after them, see [Graph.Point]
}

// Graph is an estimation problem: variables, factors, and the variables that are held fixed.
type Graph struct {
	Dim    int // of a pose: 3 in the plane, 6 in space
	Values Values
	Sets   []FactorSet
}

// New returns a graph of poses without factors. Dim is 3 or 6.
func New(dim int, poses []lie.SE3) *Graph {
	if dim != 3 && dim != 6 {
		panic("posegraph: dimension of a pose is 3 or 6")
	}
	return &Graph{Dim: dim, Values: Values{Poses: poses}}
}

// FactorSet is a batch of factors of one kind.
type FactorSet interface {
	// Couplings reports every pair of variables that share a factor, in a fixed order; repeats are allowed.
	Couplings(emit func(i, j int32))
	// Bind hands the slots of the pairs over, in the order of Couplings; it is called once for each solver.
	Bind(next func() Slot)
	// Cost returns the sum of the factors' costs at v.
	Cost(v *Values) float64
	// Linearise adds the Gauss-Newton matrix and the gradient at v to a and returns the cost.
	Linearise(v *Values, a *Assembly) float64
}

// Slot tells where the block of a pair of variables stands in the matrix: 0 nowhere (a variable is fixed), k+1 the
// off-diagonal block k as rows i and columns j, -(k+1) the same block transposed.
type Slot int32

// Assembly is the linear system of one linearisation.
type Assembly struct {
	Matrix   *sparse.Matrix
	Gradient []float64 // scalars in block order
	block    []int32   // variable -> block row, -1 when fixed
	offset   []int32   // variable -> first scalar in Gradient, -1 when fixed
}

// Diag returns the diagonal block of a variable, row-major, nil when the variable is fixed.
func (a *Assembly) Diag(variable int32) []float64 {
	b := a.block[variable]
	if b < 0 {
		return nil
	}
	return a.Matrix.Diag(int(b))
}

// Grad returns the gradient of a variable, nil when it is fixed.
func (a *Assembly) Grad(variable int32) []float64 {
	o := a.offset[variable]
	if o < 0 {
		return nil
	}
	return a.Gradient[o:]
}

// Cost returns F at the graph's values.
func (g *Graph) Cost() float64 {
	sum := 0.0
	for _, s := range g.Sets {
		sum += s.Cost(&g.Values)
	}
	return sum
}

// Components numbers the connected components of the graph in the order of their lowest variable: component[variable].
func (g *Graph) Components() (component []int32, count int) {
	n := g.Variables()
	parent := make([]int32, n)
	for i := range parent {
		parent[i] = int32(i)
	}
	find := func(i int32) int32 {
		for parent[i] != i {
			parent[i] = parent[parent[i]]
			i = parent[i]
		}
		return i
	}
	for _, s := range g.Sets {
		s.Couplings(func(i, j int32) {
			a, b := find(i), find(j)
			if a < b {
				parent[b] = a
			} else {
				parent[a] = b
			}
		})
	}
	component = make([]int32, n)
	for i := range component {
		if r := find(int32(i)); r == int32(i) {
			component[i] = int32(count)
			count++
		} else {
			component[i] = component[r]
		}
	}
	return component, count
}

// Anchors returns the lowest variable of each connected component: fixing these, and no more, makes relative measurements
// determine the rest. A component that control points hold already has none.
func (g *Graph) Anchors() []int32 {
	component, count := g.Components()
	held := g.held(component, count)
	anchors := make([]int32, 0, count)
	met := 0
	for i, c := range component {
		if int(c) == met {
			met++
			if !held[c] {
				anchors = append(anchors, int32(i))
			}
		}
	}
	return anchors
}

// check panics on a variable out of range: graphs are built by this module from validated input.
func (g *Graph) check(i, j int32) {
	if n := int32(g.Variables()); i < 0 || j < 0 || i >= n || j >= n || i == j {
		panic(fmt.Sprintf("posegraph: factor on variables %d and %d of %d", i, j, n))
	}
}
