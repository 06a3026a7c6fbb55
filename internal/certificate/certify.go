package certificate

import (
	"errors"
	"fmt"
	"slices"

	"selvage/internal/posegraph"
	"selvage/internal/sparse"
)

// Result is what [Certify] found.
type Result struct {
	Certified bool
	Reason    string  // why it was not decided; empty when certified
	Objective float64 // of the package comment, at the point that was tested
	Tolerance float64 // no eigenvalue of S lies below minus this
	Gap       float64 // smallest eigenvalue of S beside those of the gauge (the fifth, in the plane the fourth, of one component), from above
}

// ErrInterrupted says that goOn returned false.
var ErrInterrupted = errors.New("certificate: interrupted")

// The shifts that the factorisation is tried with, smallest first, over the mean of the diagonal of S. The first is what rounding may
// hide; the one that does has to be small against the gap, by this factor.
var shifts = []float64{1e-13, 1e-11, 1e-9, 1e-7}

const small = 1e-2

// Certify tests whether the bottom of the valley in which the poses of g lie, for the measurements b of g that have any weight, is the
// lowest there is. GoOn is asked now and then whether to go on. The graph is left as it is.
func Certify(g *posegraph.Graph, b *posegraph.Between, goOn func() bool) (Result, error) {
	c := newSurrogate(b, g.Dim)
	bare := posegraph.New(g.Dim, slices.Clone(g.Values.Poses))
	bare.Sets = append(bare.Sets, c)
	component, parts := bare.Components()
	if parts == len(g.Values.Poses) {
		return Result{Certified: true}, nil
	}
	solver, err := posegraph.NewSolver(bare, bare.Anchors(), sparse.Options{Workers: 2})
	if err != nil {
		return Result{}, err
	}
	o := posegraph.DefaultOptions()
	o.Watch = func(int, float64, float64) bool { return goOn() }
	r := solver.Optimise(o)
	out := Result{Objective: 2 * r.Cost}
	switch r.Stop {
	case posegraph.Interrupted:
		return Result{}, ErrInterrupted
	case posegraph.Undetermined:
		out.Reason = "with one weight for rotation and one for translation the measurements leave a pose free"
		return out, nil
	case posegraph.IterationLimit:
		out.Reason = fmt.Sprintf("the bottom was not reached in %d steps", r.Iterations)
		return out, nil
	}
	s, err := newDual(c, bare.Values.Poses, component, parts)
	if err != nil {
		return Result{}, err
	}
	for _, shift := range shifts {
		if !goOn() {
			return Result{}, ErrInterrupted
		}
		if !s.factorise(shift * s.scale) {
			continue
		}
		out.Tolerance, out.Gap = s.tol, s.gap(goOn)
		if out.Gap > 0 && s.tol <= small*out.Gap {
			out.Certified = true
			return out, nil
		}
		out.Reason = fmt.Sprintf("the smallest shift that makes the matrix positive, %.2g, is not small against its smallest eigenvalue beside those of the gauge, %.2g", s.tol, out.Gap)
		return out, nil
	}
	out.Reason = "the matrix has a negative eigenvalue: other poses may cost less"
	return out, nil
}
