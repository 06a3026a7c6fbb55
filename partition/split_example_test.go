package partition_test

import (
	"fmt"

	"selvage/partition"
)

// Two rooms, each walked in a circle, joined by a corridor.
func ExampleSplit() {
	edges := [][2]int32{
		{0, 1}, {1, 2}, {2, 3}, {3, 0}, // first room
		{3, 4}, {4, 5}, // corridor
		{5, 6}, {6, 7}, {7, 8}, {8, 5}, // second room
		{8, 9},
	}
	piece, err := partition.Split(10, edges, 2, 1)
	if err != nil {
		fmt.Println(err)
		return
	}
	q := partition.MeasureSplit(10, edges, piece)
	fmt.Println("same room:", piece[0] == piece[2], "other room:", piece[0] == piece[7])
	fmt.Println("boundary:", q.Boundary, "cut:", q.Cut, "balance:", q.Balance)
	// Output:
	// same room: true other room: false
	// boundary: 2 cut: 1 balance: 1
}
