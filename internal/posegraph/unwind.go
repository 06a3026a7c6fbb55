package posegraph

import (
	"math"

	"selvage/internal/lie"
)

// Unwind looks in a planar graph for stretches of relative poses, one leading on to the next, that have been bent by a whole turn: every
// one of them is off by a part of it in the same sense. No small step undoes that, for the turn is a minimum of its own. Where it
// finds some it chains the poses of the stretch anew from its beginning and reports true; the cost has to be adjusted and
// compared thereafter.
func Unwind(g *Graph) (found bool) {
	if g.Dim != 3 {
		return false
	}
	for _, set := range g.Sets {
		b, ok := set.(*Between)
		if !ok {
			continue
		}
		for k := 0; k < b.Len(); {
			end, sum := b.stretch(k, &g.Values)
			if math.Abs(sum) > math.Pi {
				b.chain(k, end, math.Remainder(sum, 2*math.Pi), &g.Values)
				found = true
			}
			k = end
		}
	}
	return found
}

// stretch returns where the stretch that begins at factor k ends, and the sum of its errors of heading.
func (b *Between) stretch(k int, v *Values) (end int, sum float64) {
	const slight = 0.03 // rad, no part of a turn
	for end = k; end < b.Len(); end++ {
		turn := b.Residual(end, v)[5]
		if b.W[end] == 0 || math.Abs(turn) < slight || turn*sum < 0 || end > k && b.I[end] != b.J[end-1] {
			break
		}
		sum += turn
	}
	return max(end, k+1), sum
}

// chain puts the poses within a stretch where its relative poses have them, each turned by a share of what the end is off, and moves
// them so that the end, which stays, is met.
func (b *Between) chain(k, end int, off float64, v *Values) {
	n := float64(end - k)
	x := lie.Planar(&v.Poses[b.I[k]])
	at := make([]lie.SE2, 0, end-k)
	for f := k; f < end; f++ {
		z := lie.Planar(&b.Z[f])
		x = x.Mul(z).Plus([3]float64{2: off / n})
		at = append(at, x)
	}
	last := lie.Planar(&v.Poses[b.J[end-1]])
	dx, dy := last.X-x.X, last.Y-x.Y
	for i, y := range at[:len(at)-1] {
		share := float64(i+1) / n
		y.X, y.Y = y.X+share*dx, y.Y+share*dy
		v.Poses[b.J[k+i]] = y.Spatial()
	}
}
