package scenarios

import "math"

// box is a rectangle in the plan; the zero box is empty.
type box struct {
	min, max [2]float64
	any      bool
}

func (b *box) extend(p [3]float64) {
	for i := range b.min {
		if !b.any || p[i] < b.min[i] {
			b.min[i] = p[i]
		}
		if !b.any || p[i] > b.max[i] {
			b.max[i] = p[i]
		}
	}
	b.any = true
}

// grid finds things by their place in the plan. Cells are squares; what lies within one cell size of a point lies in the nine
// cells around it.
type grid struct {
	cell   float64
	x, y   float64
	nx, ny int
	cells  [][]int
}

func newGrid(b box, cell float64) grid {
	nx := int((b.max[0]-b.min[0])/cell) + 1
	ny := int((b.max[1]-b.min[1])/cell) + 1
	return grid{cell, b.min[0], b.min[1], nx, ny, make([][]int, nx*ny)}
}

func (g *grid) place(p [3]float64) (i, j int) {
	return int(math.Floor((p[0] - g.x) / g.cell)), int(math.Floor((p[1] - g.y) / g.cell))
}

// add enters thing id at p, which lies inside the box of the grid.
func (g *grid) add(p [3]float64, id int) {
	i, j := g.place(p)
	g.cells[j*g.nx+i] = append(g.cells[j*g.nx+i], id)
}

// around returns the nine cells around p; those outside the grid are empty.
func (g *grid) around(p [3]float64) (near [9][]int) {
	i, j := g.place(p)
	n := 0
	for b := j - 1; b <= j+1; b++ {
		for a := i - 1; a <= i+1; a++ {
			if a >= 0 && a < g.nx && b >= 0 && b < g.ny {
				near[n] = g.cells[b*g.nx+a]
			}
			n++
		}
	}
	return near
}
