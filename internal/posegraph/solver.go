package posegraph

import (
	"errors"
	"fmt"
	"math"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// Solver adjusts one graph; it is made for the graph's structure (variables, factors, fixed variables) and reused while only
// values and weights change.
type Solver struct {
	g        *Graph
	symbolic *sparse.Symbolic
	factor   *sparse.Factor
	now      *Assembly // at the accepted values
	trial    *Assembly
	block    []int32 // variable -> block row, -1 when fixed
	variable []int32 // block row -> variable
	offset   []int32
	step     []float64
	next     Values // the values after the step
	diagonal []float64
}

// Options steer [Solver.Optimise]. The zero value is not useful: start from [DefaultOptions].
type Options struct {
	Tolerance     float64 // converged when the predicted decrease of F is below Tolerance max(F, 1)
	MaxIterations int
	// Watch is told after each accepted or refused step; returning false stops the adjustment. May be nil.
	Watch func(iteration int, cost, damping float64) bool
}

// DefaultOptions are those of the one-piece adjustment.
func DefaultOptions() Options { return Options{Tolerance: 1e-12, MaxIterations: 500} }

// Stop is the reason for which an adjustment ended.
type Stop uint8

// The reasons to stop.
const (
	Converged       Stop = iota + 1 // the predicted decrease is below the tolerance
	NoDecrease                      // no step lowers the cost: rounding, or a residual at half a turn, where the logarithm jumps
	IterationLimit                  // MaxIterations steps were tried
	Interrupted                     // Watch returned false
	Undetermined                    // the measurements leave a variable free, whatever the damping
	NothingToAdjust                 // every variable is fixed
)

func (s Stop) String() string {
	switch s {
	case Converged:
		return "converged"
	case NoDecrease:
		return "no_decrease"
	case IterationLimit:
		return "iteration_limit"
	case Interrupted:
		return "interrupted"
	case Undetermined:
		return "undetermined"
	case NothingToAdjust:
		return "nothing_to_adjust"
	}
	return "unknown"
}

// Result tells how an adjustment went.
type Result struct {
	InitialCost float64
	Cost        float64 // F at the final values
	Iterations  int     // factorisations
	Refused     int     // of these, steps that would have raised the cost: cut short, or damped
	Stop        Stop
	Decrease    float64 // of F that a full step still predicted at the end
	Weakest     int32   // with Undetermined: a variable that the measurements leave free, else -1
}

// ErrNoFixed is returned for a graph none of whose variables is fixed.
var ErrNoFixed = errors.New("posegraph: no variable is fixed, so relative measurements leave the datum free")

// NewSolver orders and analyses the graph with the given variables held fixed. Variables in last are eliminated last.
func NewSolver(g *Graph, fixed []int32, ordering sparse.Options) (*Solver, error) {
	n := g.Variables()
	s := &Solver{g: g, block: make([]int32, n), offset: make([]int32, n)}
	for _, f := range fixed {
		if f < 0 || int(f) >= n {
			panic(fmt.Sprintf("posegraph: fixed variable %d of %d", f, n))
		}
		s.block[f] = -1
	}
	if len(fixed) == 0 && n > 0 && !g.absolute() {
		return nil, ErrNoFixed
	}
	scalars := int32(0)
	for i := range s.block {
		if s.block[i] < 0 {
			s.offset[i] = -1
			continue
		}
		s.block[i] = int32(len(s.variable))
		s.offset[i] = scalars
		s.variable = append(s.variable, int32(i))
		scalars += int32(g.width(int32(i)))
	}
	dims := make([]int, len(s.variable))
	for i, v := range s.variable {
		dims[i] = g.width(v)
	}
	pairs, slots := s.pairs()
	var err error
	ordering.Last = s.blocksOf(ordering.Last)
	if s.symbolic, err = sparse.Analyse(sparse.Pattern{Dims: dims, Pairs: pairs}, ordering); err != nil {
		return nil, err
	}
	k := 0
	for _, set := range g.Sets {
		set.Bind(func() Slot { k++; return slots[k-1] })
	}
	s.factor = sparse.NewFactor(s.symbolic)
	s.now, s.trial = s.assembly(int(scalars)), s.assembly(int(scalars))
	s.step = make([]float64, scalars)
	s.diagonal = make([]float64, scalars)
	s.next.Poses = make([]lie.SE3, len(g.Values.Poses))
	s.next.Points = make([][3]float64, len(g.Values.Points))
	return s, nil
}

func (s *Solver) blocksOf(variables []int32) []int32 {
	var blocks []int32
	for _, v := range variables {
		if s.block[v] >= 0 {
			blocks = append(blocks, s.block[v])
		}
	}
	return blocks
}

func (s *Solver) assembly(scalars int) *Assembly {
	return &Assembly{Matrix: s.symbolic.NewMatrix(), Gradient: make([]float64, scalars), block: s.block, offset: s.offset}
}

// pairs collects the distinct off-diagonal blocks and the slot of each coupling, by counting sort on the lower block.
func (s *Solver) pairs() (pairs [][2]int32, slots []Slot) {
	var lo, hi []int32 // block rows of each coupling, lo < hi; -1 when one is fixed
	var swapped []bool
	start := make([]int32, len(s.variable)+2)
	for _, set := range s.g.Sets {
		set.Couplings(func(i, j int32) {
			s.g.check(i, j)
			a, b := s.block[i], s.block[j]
			switch {
			case a < 0 || b < 0:
				a, b = -1, -1
			case a > b:
				a, b = b, a
				swapped = append(swapped, true)
			}
			if len(swapped) == len(lo) {
				swapped = append(swapped, false)
			}
			lo, hi = append(lo, a), append(hi, b)
			start[a+2]++
		})
	}
	for i := 1; i < len(start); i++ {
		start[i] += start[i-1]
	}
	order := make([]int32, len(lo))
	for k, a := range lo {
		order[start[a+1]] = int32(k)
		start[a+1]++
	}
	slots = make([]Slot, len(lo))
	seen := make([]int32, len(s.variable)) // block -> pair number + 1 within the current row
	stamp := make([]int32, len(s.variable))
	for _, k := range order {
		a, b := lo[k], hi[k]
		if a < 0 {
			continue
		}
		if stamp[b] != a+1 {
			stamp[b] = a + 1
			pairs = append(pairs, [2]int32{a, b})
			seen[b] = int32(len(pairs))
		}
		slots[k] = Slot(seen[b])
		if swapped[k] {
			slots[k] = -slots[k]
		}
	}
	return pairs, slots
}

// linearise fills a at v and returns the cost.
func (s *Solver) linearise(v *Values, a *Assembly) float64 {
	a.Matrix.Zero()
	clear(a.Gradient)
	cost := 0.0
	for _, set := range s.g.Sets {
		cost += set.Linearise(v, a)
	}
	s.level(a)
	return cost
}

// Damping of Levenberg and Marquardt: lambda times the diagonal is added when a plain Gauss-Newton step would raise the cost.
// Where the matrix is badly conditioned (mit-killian: 5e11) the useful values are small and the plain step is of no use until
// late: lambda falls by what the last step was worth, and is dropped only when it no longer counts.
const (
	firstDamping = 1e-4
	leastDamping = 1e-12
	mostDamping  = 1e10
)

// Optimise adjusts the graph's values.
func (s *Solver) Optimise(o Options) Result {
	r := Result{Weakest: -1}
	if len(s.variable) == 0 {
		r.InitialCost = s.g.Cost()
		r.Cost, r.Stop = r.InitialCost, NothingToAdjust
		return r
	}
	cost := s.linearise(&s.g.Values, s.now)
	r.InitialCost, r.Cost = cost, cost
	lambda := 0.0
	for r.Iterations < o.MaxIterations {
		if o.Watch != nil && !o.Watch(r.Iterations, cost, lambda) {
			r.Stop = Interrupted
			return r
		}
		r.Iterations++
		decrease, err := s.solve(lambda)
		if err != nil {
			if lambda >= mostDamping {
				return s.undetermined(r, err)
			}
			lambda = math.Max(8*lambda, firstDamping)
			continue
		}
		r.Decrease = decrease
		s.advance()
		trial := s.linearise(&s.next, s.trial)
		scale := math.Max(math.Abs(cost), 1)
		if cost-trial < fair*decrease {
			if trial > cost {
				r.Refused++
			}
			trial = s.shorter(cost, trial, decrease)
		}
		lower := trial <= cost
		rise := trial - cost
		if lower {
			s.g.Values, s.next = s.next, s.g.Values
			s.now, s.trial = s.trial, s.now
			cost, r.Cost = trial, trial
		}
		if decrease < o.Tolerance*scale {
			// Rounding may hide the effect of such a step. Damping makes any step small: what counts is the plain one.
			if lambda > 0 {
				r.Iterations++
				if r.Decrease, err = s.solve(0); err != nil {
					return s.undetermined(r, err)
				}
			}
			if r.Decrease < o.Tolerance*scale {
				r.Stop = Converged
				return r
			}
		}
		if lower {
			switch gain := -rise / decrease; {
			case gain > 0.75:
				lambda /= 10
			case gain > 0.25:
				lambda /= 3
			}
			if lambda < leastDamping {
				lambda = 0
			}
			continue
		}
		if lambda >= mostDamping || rise < 1e-14*scale {
			r.Stop = NoDecrease
			return r
		}
		lambda = math.Max(8*lambda, firstDamping)
	}
	r.Stop = IterationLimit
	return r
}

// fair is the share of the expected decrease below which a step is too long.
const fair = 0.25

// shorter replaces a step that brought too little by the one at the bottom of the parabola through the cost before, its slope and
// the cost behind the step, if that is better, and returns the cost there. Where residuals bend so much that the full step of Gauss and Newton
// overshoots however near the optimum is (many sightings of one mark from one place, their mean error not zero), damping every variable by itself
// would take hundreds of steps.
func (s *Solver) shorter(cost, trial, decrease float64) float64 {
	share := decrease / (trial - cost + 2*decrease)
	if !(share > 0.05) {
		return trial
	}
	s.stretch(share)
	if short := s.linearise(&s.next, s.trial); short < trial || trial > cost {
		return short
	}
	s.stretch(1 / share)
	return s.linearise(&s.next, s.trial)
}

// stretch makes the step longer or shorter.
func (s *Solver) stretch(by float64) {
	for i := range s.step {
		s.step[i] *= by
	}
	s.advance()
}

// solve computes the step for a damping and returns the decrease of F that the linear model expects of it, the damping left out.
func (s *Solver) solve(lambda float64) (decrease float64, err error) {
	s.damp(lambda)
	err = s.factor.FactoriseSolve(s.now.Matrix, s.now.Gradient, s.step)
	s.undamp(lambda)
	for i, g := range s.now.Gradient {
		decrease += g * s.step[i] / 2 // the step is minus this solution
	}
	return decrease, err
}

func (s *Solver) undetermined(r Result, err error) Result {
	r.Stop = Undetermined
	if bad := (*sparse.NotPositiveError)(nil); errors.As(err, &bad) {
		r.Weakest = s.variable[bad.Block]
	}
	return r
}

// Linearise linearises the graph at its values and returns F and its gradient, in block order; the slice is the solver's.
func (s *Solver) Linearise() (cost float64, gradient []float64) {
	cost = s.linearise(&s.g.Values, s.now)
	return cost, s.now.Gradient
}

// Decrease returns 1/2 v' H^-1 v, H the matrix of the last [Solver.Linearise]: what F would fall by to second order if its
// gradient were v (in block order).
func (s *Solver) Decrease(v []float64) (float64, error) {
	if err := s.factor.FactoriseSolve(s.now.Matrix, v, s.step); err != nil {
		return 0, err
	}
	sum := 0.0
	for i, x := range v {
		sum += x * s.step[i]
	}
	return sum / 2, nil
}

// Covariance is the inverse of the Gauss-Newton matrix on the pattern of the graph: the covariance of each variable and of
// each pair that shares a factor, in the tangents at the values, relative to the fixed variables.
type Covariance struct {
	s *Solver
	m *sparse.Matrix
}

// Covariance linearises at the graph's values and computes the covariance blocks. The Covariance is overwritten by the next
// call and stays valid until then.
func (s *Solver) Covariance() (Covariance, error) {
	s.Linearise()
	if err := s.factor.Factorise(s.now.Matrix); err != nil {
		return Covariance{}, err
	}
	s.factor.SelectedInverse(s.trial.Matrix)
	return Covariance{s, s.trial.Matrix}, nil
}

// Of returns the covariance of a variable, Dim x Dim row-major (3 x 3 for a point); nil when it is fixed, that is zero.
func (c Covariance) Of(variable int32) []float64 {
	if b := c.s.block[variable]; b >= 0 {
		return c.m.Diag(int(b))
	}
	return nil
}

// Across writes the cross covariance of the pair of poses that owns a slot, rows i and columns j as the factor set coupled them, to
// dst (Dim x Dim).
func (c Covariance) Across(slot Slot, dst []float64) {
	d := c.s.g.Dim
	switch {
	case slot == 0:
		clear(dst[:d*d])
	case slot > 0:
		copy(dst, c.m.Off(int(slot - 1))[:d*d])
	default:
		m := c.m.Off(int(-slot - 1))
		for i := 0; i < d; i++ {
			for j := 0; j < d; j++ {
				dst[i*d+j] = m[j*d+i]
			}
		}
	}
}

// Step takes one plain Gauss-Newton step, whatever it does to the cost, if it promises a decrease of F below limit; else it
// leaves the values alone and reports false.
func (s *Solver) Step(limit float64) (decrease float64, taken bool) {
	s.Linearise()
	decrease, err := s.solve(0)
	if err != nil {
		return 0, false
	}
	if !(decrease < limit) {
		return decrease, false
	}
	s.advance()
	s.g.Values, s.next = s.next, s.g.Values
	return decrease, true
}

// damp adds lambda times the diagonal; undamp restores it.
func (s *Solver) damp(lambda float64) {
	if lambda == 0 {
		return
	}
	for b, v := range s.variable {
		d, kept := s.g.width(v), s.diagonal[s.offset[v]:]
		m := s.now.Matrix.Diag(b)
		for i := 0; i < d; i++ {
			kept[i] = m[i*(d+1)]
			m[i*(d+1)] *= 1 + lambda
		}
	}
}

func (s *Solver) undamp(lambda float64) {
	if lambda == 0 {
		return
	}
	for b, v := range s.variable {
		d, kept := s.g.width(v), s.diagonal[s.offset[v]:]
		m := s.now.Matrix.Diag(b)
		for i := 0; i < d; i++ {
			m[i*(d+1)] = kept[i]
		}
	}
}

// advance writes the stepped values to next.
func (s *Solver) advance() {
	for i, x := range s.g.Values.Poses {
		o := s.offset[i]
		if o < 0 {
			s.next.Poses[i] = x
			continue
		}
		d := s.step[o:]
		if s.g.Dim == 3 {
			s.next.Poses[i] = lie.Planar(&x).Plus([3]float64{-d[0], -d[1], -d[2]}).Spatial()
		} else {
			s.next.Poses[i] = x.Plus(lie.Tangent{-d[0], -d[1], -d[2], -d[3], -d[4], -d[5]})
		}
	}
	s.advancePoints()
}

// Joint returns the joint covariance of some variables, square and row-major with Dim rows for a pose and 3 for a point, in the
// tangents at the values and relative to the fixed variables (whose rows are zero). Every pair of variables is covered, whatever
// the pattern; the cost is one solution for each scalar.
func (s *Solver) Joint(variables []int32) ([]float64, error) {
	s.Linearise()
	if err := s.factor.Factorise(s.now.Matrix); err != nil {
		return nil, err
	}
	n := len(s.step)
	row := make([]int, len(variables)+1) // of each variable in the result
	for k, v := range variables {
		row[k+1] = row[k] + s.g.width(v)
	}
	m := row[len(variables)]
	out := make([]float64, m*m)
	columns := make([]float64, s.g.Dim*n)
	for k, v := range variables {
		o, d := int(s.offset[v]), row[k+1]-row[k]
		if o < 0 {
			continue
		}
		clear(columns)
		for c := 0; c < d; c++ {
			columns[c*n+o+c] = 1
		}
		s.factor.SolveMany(columns[:d*n], d)
		for l, w := range variables {
			p := int(s.offset[w])
			if p < 0 {
				continue
			}
			for c := 0; c < d; c++ {
				for r := 0; r < row[l+1]-row[l]; r++ {
					out[(row[l]+r)*m+row[k]+c] = columns[c*n+p+r]
				}
			}
		}
	}
	return out, nil
}
