package report

import "math"

// point is a place on the drawing in px, x to the right and y down.
type point [2]float64

func (p point) finite() bool {
	return !math.IsNaN(p[0]+p[1]) && !math.IsInf(p[0], 0) && !math.IsInf(p[1], 0)
}

// simplify leaves out points of a polyline so that what remains stays within
// tol px of what was given. Half of the tolerance goes to dropping points next
// to the last one kept, half to the line simplification of Douglas and Peucker
// ("Algorithms for the reduction of the number of points required to represent
// a digitized line or its caricature", Cartographica 1973), run over stretches
// of bounded length because its worst case is quadratic.
func simplify(pts []point, tol float64) []point {
	const stretch = 2000
	if len(pts) < 3 {
		return pts
	}
	thin := pts[:1:1]
	for _, p := range pts[1 : len(pts)-1] {
		l := thin[len(thin)-1]
		if math.Hypot(p[0]-l[0], p[1]-l[1]) > tol/2 {
			thin = append(thin, p)
		}
	}
	thin = append(thin, pts[len(pts)-1])

	keep := make([]bool, len(thin))
	type piece struct{ a, b int }
	var open []piece
	for a := 0; a < len(thin)-1; a += stretch {
		b := min(a+stretch, len(thin)-1)
		keep[a], keep[b] = true, true
		open = append(open[:0], piece{a, b})
		for len(open) > 0 {
			s := open[len(open)-1]
			open = open[:len(open)-1]
			far, at := tol/2, -1
			for i := s.a + 1; i < s.b; i++ {
				if h := distance(thin[i], thin[s.a], thin[s.b]); h > far {
					far, at = h, i
				}
			}
			if at >= 0 {
				keep[at] = true
				open = append(open, piece{s.a, at}, piece{at, s.b})
			}
		}
	}
	out := thin[:0]
	for i, p := range thin {
		if keep[i] {
			out = append(out, p)
		}
	}
	return out
}

// distance from p to the segment from a to b.
func distance(p, a, b point) float64 {
	dx, dy := b[0]-a[0], b[1]-a[1]
	t := 0.0
	if q := dx*dx + dy*dy; q > 0 {
		t = max(0, min(1, ((p[0]-a[0])*dx+(p[1]-a[1])*dy)/q))
	}
	return math.Hypot(p[0]-a[0]-t*dx, p[1]-a[1]-t*dy)
}

// columns thins a graph with ascending x to the first, lowest, highest and last
// point in every column one px wide, which draws the same.
func columns(pts []point) []point {
	var out []point
	for i := 0; i < len(pts); {
		j, lo, hi := i, i, i
		for col := math.Floor(pts[i][0]); j < len(pts) && math.Floor(pts[j][0]) == col; j++ {
			if pts[j][1] < pts[lo][1] {
				lo = j
			}
			if pts[j][1] > pts[hi][1] {
				hi = j
			}
		}
		last := -1
		for _, k := range [4]int{i, min(lo, hi), max(lo, hi), j - 1} {
			if k > last {
				out = append(out, pts[k])
				last = k
			}
		}
		i = j
	}
	return out
}
