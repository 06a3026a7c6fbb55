package partition_test

import (
	"fmt"
	"log"

	"selvage/partition"
)

// Five poses along a line in the plane, each measured from the one before; other robots have seen the first and the last. With all
// headings zero and all steps one metre, a motion of pose i by (x, y, rz) moves the next by Ad = [1 0 0; 0 1 1; 0 0 1].
func ExampleCondense() {
	const information = 100.
	var terms []partition.Quadratic
	for i := int32(0); i < 4; i++ {
		J := [3][6]float64{ // of the residual by the two poses: -Ad, I
			{-1, 0, 0, 1, 0, 0},
			{0, -1, -1, 0, 1, 0},
			{0, 0, -1, 0, 0, 1},
		}
		term := partition.Quadratic{Nodes: []int32{i, i + 1}, H: make([]float64, 36), B: make([]float64, 6)}
		for _, row := range J {
			for a, x := range row {
				for b, y := range row {
					term.H[6*a+b] += x * information * y
				}
			}
		}
		terms = append(terms, term)
	}
	c, err := partition.Condense(3, 5, terms, []int32{0, 4})
	if err != nil {
		log.Fatal(err)
	}
	pair := c.Cliques[0]
	fmt.Println("junctions", c.Junctions, "in", c.Bytes, "bytes")
	fmt.Printf("information along the line %.1f, a quarter of one step's\n", pair.H[0])
	// Output:
	// junctions [0 4] in 156 bytes
	// information along the line 25.0, a quarter of one step's
}
