package evidence

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"selvage/internal/lie"
)

// Placing is how a map as a whole lies on points whose places are known.
type Placing struct {
	Pose   lie.SE3   // known places from places in the map
	Off    []float64 // of every point: how far the map then has it from its known place, m
	Agrees []bool    // the place counts; the others contradict it
	Sigma  float64   // spread along one axis of those that count, m
}

// wrong is the chance with which a sound point is taken for one that contradicts.
const wrong = 1e-3

// PlaceOn finds the rigid motion that brings points of a map to their known places although some of these may be wrong. Variance is
// the most to be expected of each difference in any direction; what else the map has of errors is estimated and added to all. It
// reports false when no motion is told by more than half of the points, and by one more than would make up any motion: three in
// the plane, four in space.
//
// Every pair of points that lies apart, in space every triple, makes a hypothesis, whose worth is the distance within which half of
// the points come; the least such distance also tells the spread (least median of squares: Rousseeuw, 'Least Median of Squares
// Regression', Journal of the American Statistical Association 79, 1984, with the correction for few points of Rousseeuw and Leroy,
// 'Robust Regression and Outlier Detection', 1987). From there points beyond what one in a thousand exceeds are cut off, the rest is
// fitted, and its spread estimated anew, until the set stays.
func PlaceOn(planar bool, from, to [][3]float64, variance []float64) (Placing, bool) {
	n, few, dim := len(from), 3, 3.0
	most := mostInSpace
	if planar {
		few, dim, most = 2, 2, mostGlimpses
	}
	need := max(few+1, n/2+1)
	if n < need {
		return Placing{}, false
	}
	p := placement{planar: planar, from: from, to: to, squared: make([]float64, n), sorted: make([]float64, n)}
	p.best = math.Inf(1)
	step := max(1, (n+most-1)/most)
	for i := 0; i < n; i += step {
		for j := i + step; j < n; j += step {
			if planar {
				p.try(need, i, j)
				continue
			}
			for k := j + step; k < n; k += step {
				p.try(need, i, j, k)
			}
		}
	}
	if math.IsInf(p.best, 1) {
		return Placing{}, false
	}
	chi := distuv.ChiSquared{K: dim}
	bound := chi.Quantile(1 - wrong)
	ordered := slices.Sorted(slices.Values(variance))
	small := 1 + 5/(float64(n)-float64(few)+1)
	extra := max(0, small*small*p.best/chi.Quantile((float64(need)-0.5)/float64(n))-ordered[n/2])
	out := Placing{Pose: p.pose, Off: make([]float64, n), Agrees: make([]bool, n)}
	weight := make([]float64, n)
	count := 0
	p.measure(&out.Pose)
	for range 50 {
		same := true
		count = 0
		for i, r := range p.squared {
			in := r <= bound*(variance[i]+extra)
			same = same && in == out.Agrees[i]
			out.Agrees[i], weight[i] = in, 0
			if in {
				weight[i] = 1 / (variance[i] + extra)
				count++
			}
		}
		if same || count < need {
			break
		}
		pose, ok := lie.FitPoints(planar, from, to, weight)
		if !ok {
			return Placing{}, false
		}
		out.Pose = pose
		p.measure(&pose)
		sum, expected := 0.0, 0.0
		for i, r := range p.squared {
			if out.Agrees[i] {
				sum += r
				expected += dim * variance[i]
			}
		}
		freedoms := dim*float64(count) - dim*(dim+1)/2
		extra = max(0, (sum-expected)/freedoms)
		out.Sigma = math.Sqrt(sum / freedoms)
	}
	for i, r := range p.squared {
		out.Off[i] = math.Sqrt(r)
	}
	return out, count >= need
}

// placement is a search for a motion.
type placement struct {
	planar          bool
	from, to        [][3]float64
	squared, sorted []float64
	pose            lie.SE3
	best            float64 // squared distance within which the points needed come
}

// measure squares the distances of all points after a motion.
func (p *placement) measure(pose *lie.SE3) {
	for i := range p.from {
		p.squared[i] = squaredDistance(pose.Apply(p.from[i]), p.to[i])
	}
}

// try takes the motion that some points make, if it brings the points needed nearer than any before.
func (p *placement) try(need int, points ...int) {
	var from, to [3][3]float64
	for k, i := range points {
		from[k], to[k] = p.from[i], p.to[i]
	}
	pose, ok := lie.FitPoints(p.planar, from[:len(points)], to[:len(points)], nil)
	if !ok {
		return
	}
	p.measure(&pose)
	copy(p.sorted, p.squared)
	slices.Sort(p.sorted)
	if at := p.sorted[need-1]; at < p.best {
		p.best, p.pose = at, pose
	}
}
