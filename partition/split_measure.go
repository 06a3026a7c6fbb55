package partition

// SplitQuality tells how good a split is.
type SplitQuality struct {
	Pieces          int     // pieces with at least one vertex
	Connected       bool    // whether every piece is connected within itself
	Cut             int     // edges between pieces, repeated edges counted each time
	Balance         float64 // vertices of the largest piece over those of an even share
	Boundary        int     // vertices with an edge to another piece
	BoundaryLargest int     // the most such vertices in one piece
}

// MeasureSplit judges an assignment of n vertices to pieces numbered from 0.
// The number of pieces is the largest entry of piece plus one. It panics when
// piece does not have n entries, has a negative one, or an edge has an end
// outside 0 up to n.
func MeasureSplit(n int, edges [][2]int32, piece []int32) SplitQuality {
	if len(piece) != n {
		panic("partition: MeasureSplit needs one piece for each vertex")
	}
	k := 0
	for _, p := range piece {
		k = max(k, int(p)+1)
	}
	q := SplitQuality{Connected: true}
	border := make([]bool, n)
	// Union of the ends of edges inside pieces counts the parts of each piece.
	link := make([]int32, n)
	for v := range link {
		link[v] = int32(v)
	}
	find := func(v int32) int32 {
		for link[v] != v {
			link[v] = link[link[v]]
			v = link[v]
		}
		return v
	}
	for _, e := range edges {
		if piece[e[0]] != piece[e[1]] {
			q.Cut++
			border[e[0]], border[e[1]] = true, true
		} else {
			link[find(e[0])] = find(e[1])
		}
	}
	size, parts, borders := make([]int, k), make([]int, k), make([]int, k)
	for v, p := range piece {
		size[p]++
		if link[v] == int32(v) {
			parts[p]++
		}
		if border[v] {
			borders[p]++
			q.Boundary++
		}
	}
	largest := 0
	for p := range k {
		if size[p] > 0 {
			q.Pieces++
		}
		q.Connected = q.Connected && parts[p] <= 1
		largest = max(largest, size[p])
		q.BoundaryLargest = max(q.BoundaryLargest, borders[p])
	}
	if n > 0 {
		q.Balance = float64(largest) * float64(k) / float64(n)
	}
	return q
}
