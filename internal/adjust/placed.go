package adjust

import (
	"math"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/evidence"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// Landmark is a mark whose place in the datum was surveyed beside where an adjustment has it.
type Landmark struct {
	Mark   int        // of the survey
	Island int32      // that has seen it
	At     [3]float64 // adjusted, m
	Off    [3]float64 // adjusted minus surveyed, m; NaN for a coordinate that was not surveyed
}

// Landmarks lists the control and check points that were seen, by island in the order of their first sightings. Their differences
// mean something where the island stands in the datum, see [Problem.InDatum].
func (p *Problem) Landmarks() []Landmark {
	var out []Landmark
	for k := range p.Points {
		m := &p.marks[p.Points[k].Mark]
		if m.Role == survey.PlainMark {
			continue
		}
		l := Landmark{Mark: p.Points[k].Mark, Island: p.Points[k].Island, At: p.Graph.Values.Points[k]}
		for c := range l.Off {
			l.Off[c] = math.NaN()
			if !math.IsInf(m.Sigma[c], 1) {
				l.Off[c] = l.At[c] - m.T[c]
			}
		}
		out = append(out, l)
	}
	return out
}

// Placed is how an island lies on its control points, which took no part in its adjustment.
type Placed struct {
	Island int32
	Marks  []int  // of the survey: control points that were seen and of which all coordinates are known
	Agrees []bool // of each: it counted
	Off    []float64
	Sigma  float64 // of those that counted, along one axis
	Stands bool    // enough control points tell one place; else the island stayed where it was
}

// Place moves every island as a whole to where its control points have it, leaving out those that contradict the others, see
// [evidence.PlaceOn]; shapes do not change. The problem must have been solved with Apart.
func (p *Problem) Place() ([]Placed, error) {
	sigma, err := p.solver.Covariance()
	if err != nil {
		return nil, err
	}
	var out []Placed
	planar := p.Graph.Dim == 3
	axes := 3
	if planar {
		axes = 2
	}
	p.placed = make([]bool, p.Islands)
	for island := range int32(p.Islands) {
		x := Placed{Island: island}
		var points []int32
		var from, to [][3]float64
		var variance []float64
		for k := range p.Points {
			m := &p.marks[p.Points[k].Mark]
			if m.Role != survey.ControlPoint || p.Points[k].Island != island {
				continue
			}
			squared := 0.0
			for _, s := range m.Sigma[:axes] {
				squared = max(squared, s*s)
			}
			if math.IsInf(squared, 1) {
				continue
			}
			x.Marks = append(x.Marks, p.Points[k].Mark)
			points, from, to, variance = append(points, int32(k)), append(from, p.Graph.Values.Points[k]), append(to, m.T), append(variance, squared)
		}
		if len(x.Marks) == 0 {
			continue
		}
		for i, v := range p.inShape(points, axes, sigma) {
			variance[i] += v
		}
		on, ok := evidence.PlaceOn(planar, from, to, variance)
		if x.Stands = ok; ok {
			x.Agrees, x.Off, x.Sigma = on.Agrees, on.Off, on.Sigma
			p.move(island, &on.Pose)
		}
		p.placed[island] = ok
		out = append(out, x)
	}
	return out, nil
}

// inShape returns the largest variance in any direction of each of some points of an island within the figure that they make
// together: their joint covariance, freed of what moves them as a whole (S-transformation: Baarda, 'S-Transformations and Criterion Matrices',
// Netherlands Geodetic Commission 1973).
func (p *Problem) inShape(points []int32, axes int, sigma posegraph.Covariance) []float64 {
	n := axes * len(points)
	joint := mat.NewDense(n, n, nil)
	const together = 8
	scalars := sigma.Scalars()
	vectors := make([]float64, min(together, n)*scalars)
	offset := func(i int) int { return sigma.Offset(p.Graph.Point(points[i/axes])) + i%axes }
	for first := 0; first < n; first += together {
		count := min(together, n-first)
		clear(vectors)
		for c := range count {
			vectors[c*scalars+offset(first+c)] = 1
		}
		sigma.Apply(vectors[:count*scalars], count)
		for c := range count {
			for r := range n {
				joint.Set(r, first+c, vectors[c*scalars+offset(r)])
			}
		}
	}
	motions := axes * (axes + 1) / 2
	g := mat.NewDense(n, motions, nil)
	var middle [3]float64
	for _, k := range points {
		for c, x := range p.Graph.Values.Points[k] {
			middle[c] += x / float64(len(points))
		}
	}
	for i, k := range points {
		x := p.Graph.Values.Points[k]
		for c := range x {
			x[c] -= middle[c]
		}
		turn := lie.Skew(x)
		for r := range axes {
			g.Set(axes*i+r, r, 1)
			for c := axes; c < motions; c++ {
				about := c - axes
				if axes == 2 {
					about = 2
				}
				g.Set(axes*i+r, c, -turn[3*r+about])
			}
		}
	}
	out := make([]float64, len(points))
	var svd mat.SVD
	if !svd.Factorize(g, mat.SVDThin) {
		panic("adjust: points that are not finite")
	}
	var u, along, rest mat.Dense
	svd.UTo(&u)
	values := svd.Values(nil)
	rank := 0
	for rank < len(values) && values[rank] > 1e-9*values[0] {
		rank++
	}
	motion := u.Slice(0, n, 0, rank)
	project := func(m mat.Matrix) *mat.Dense { // I - U U', times m
		along.Reset()
		along.Mul(motion.T(), m)
		rest.Reset()
		rest.Mul(motion, &along)
		var out mat.Dense
		out.Sub(m, &rest)
		return &out
	}
	free := project(project(joint).T())
	for i := range points {
		block := mat.NewSymDense(axes, nil)
		for r := range axes {
			for c := r; c < axes; c++ {
				block.SetSym(r, c, free.At(axes*i+r, axes*i+c))
			}
		}
		var eigen mat.EigenSym
		eigen.Factorize(block, false)
		out[i] = eigen.Values(nil)[axes-1]
	}
	return out
}

// InDatum tells whether control points hold an island, or it was placed on them.
func (p *Problem) InDatum(island int32) bool {
	if p.placed != nil {
		return p.placed[island]
	}
	for _, v := range p.Anchors {
		if p.Island[v] == island {
			return false
		}
	}
	return true
}
