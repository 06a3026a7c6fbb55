package evidence

import (
	"selvage/internal/lie"
)

// Unit is one session of one robot: a map of its own, right in itself up to its covariance. Nodes are numbered in the order
// of the track.
type Unit struct {
	Name string

	// Poses holds unit_from_node for each node.
	Poses []lie.SE3

	// TravelM holds the metres travelled along the track up to each node, ascending.
	TravelM []float64

	// Covariance returns, from the unit's own measurements alone, the covariance (m^2, m rad, rad^2) of the relative pose X_i^-1 X_j in its own tangent, perturbed from
	// the right, row-major 6 x 6. In the plane only rows and columns 0, 1 and 5 are read. Called with i < j, both being nodes
	// of ties; never concurrently.
	Covariance func(i, j int) [36]float64
}

// End is one end of a tie: a node of a unit, both as indices.
type End struct{ Unit, Node int }

// Tie is one measurement Z of the pose of To seen from From, with its covariance in its own tangent (row-major 6 x 6; in the
// plane rows and columns 0, 1 and 5).
type Tie struct {
	Name     string // what findings call it; may be empty
	From, To End
	Z        lie.SE3
	Cov      [36]float64
}

// Options are the thresholds of [Decide]. Start from [DefaultOptions].
type Options struct {
	// Dim is 3 for surveys in space and 2 in the plane.
	Dim int

	// Gate is the probability with which a true misclosure passes the consistency test, in (0, 1). Refusal asks for a misclosure
	// ten times rarer than 1-Gate.
	Gate float64

	// BiasYaw is the standard deviation of a constant heading bias that the units' covariances do not know of, radians per metre
	// travelled. Too small and true ties are refused, too large and false ones slip through.
	BiasYaw float64

	// PlaceM is how far two ties must be apart in metres travelled, in both units, to rest on two places; half of it as the
	// crow flies.
	PlaceM float64

	// CycleMargin and BridgeMargin are the margins, in places, that a hypothesis needs to be held: the first if a cycle of units
	// confirms it, the second if none does. Two units alone have no cycle.
	CycleMargin, BridgeMargin int

	// Chance is the expected number of accidental agreements, over all pairs of units looked at, above which a hypothesis
	// stays open.
	Chance float64

	// Accidents is the expected number of false ties that may agree with a prediction by accident, in the whole fleet. Predictions
	// too loose for that hold nothing.
	Accidents float64

	// CliqueEffort bounds the search for a largest consistent set of one pair, in steps. A pair whose search was cut short
	// stays open unless what was found suffices.
	CliqueEffort int
}

// DefaultOptions returns the thresholds for surveys of dimension dim, 2 or 3. The bias is .05 degrees per half metre.
func DefaultOptions(dim int) Options {
	return Options{
		Dim:          dim,
		Gate:         0.99,
		BiasYaw:      1.745e-3,
		PlaceM:       5,
		CycleMargin:  3,
		BridgeMargin: 5,
		Chance:       0.01,
		Accidents:    0.05,
		CliqueEffort: 200_000,
	}
}

// Verdict is the finding on a tie. The zero value is Open.
type Verdict uint8

const (
	Open    Verdict = iota // not enough evidence either way
	Held                   // part of the solution
	Refused                // contradicted by what is held
)

func (v Verdict) String() string {
	switch v {
	case Held:
		return "held"
	case Refused:
		return "refused"
	}
	return "open"
}

// Finding is the verdict on one tie and what it rests on.
type Finding struct {
	Verdict Verdict

	// Reason says in plain words what speaks for or against the tie, or what would settle it.
	Reason string

	// Statistic is the squared Mahalanobis distance of the misclosure that decided, with DoF degrees of freedom, and Limit the bound
	// it was held against: from there on it speaks against the tie. All are 0 when no loop was tested.
	Statistic float64
	DoF       int
	Limit     float64

	// Hypothesis is the index in Result.Hypotheses of the set the tie belongs to, -1 if none.
	Hypothesis int

	// Places is the number of places that set rests on, Margin its margin; 0 without a set.
	Places, Margin int
}

// Hypothesis is a set of mutually consistent ties between two units, A < B.
type Hypothesis struct {
	A, B   int
	Ties   []int // indices into the ties given to Decide, ascending
	Places int

	// AFromB is where the set puts the frame of B in that of A.
	AFromB lie.SE3

	// Margin is by how many places the best configuration of the fleet beats the best one that contradicts this hypothesis;
	// negative if the best configuration itself contradicts it. Margins above BridgeMargin are not told apart. It is at most 2 if
	// striking out two places would part the units.
	Margin int

	// Cycle tells whether units other than A and B confirm it.
	Cycle bool

	// Chance is the expected number of sets as good as this one among unrelated ties.
	Chance float64

	Held bool
}

// Result is what [Decide] found.
type Result struct {
	Ties       []Finding // one per tie, in the order given
	Hypotheses []Hypothesis

	// Island numbers the islands of units joined by held ties, per unit, in the order of their lowest unit. A unit that nothing
	// connects is an island of its own.
	Island []int

	// DatumFromUnit is a start for the joint solution: where each unit's frame lies in the frame of its island's lowest unit.
	DatumFromUnit []lie.SE3
}

// Decide finds out which ties are believed. Ties must connect nodes that exist, of two different units, and their
// covariances must be positive definite; anything else is a programming mistake and panics.
func Decide(units []Unit, ties []Tie, o Options) Result {
	check(units, ties, o)
	b := newBody(units, ties, o)
	groups := b.pairs()
	var hs []hypothesis
	for _, g := range groups {
		hs = append(hs, b.hypothesise(g)...)
	}
	f := newFleet(b, hs)
	w := f.weigh(len(groups))
	return b.conclude(f, w)
}

func check(units []Unit, ties []Tie, o Options) {
	if o.Dim != 2 && o.Dim != 3 {
		panic("evidence: dimension must be 2 or 3")
	}
	if !(o.Gate > 0 && o.Gate < 1 && o.BiasYaw >= 0 && o.PlaceM > 0 && o.CycleMargin > 0 && o.BridgeMargin > 0) {
		panic("evidence: thresholds must be positive, the gate below 1")
	}
	for i := range units {
		if len(units[i].Poses) != len(units[i].TravelM) {
			panic("evidence: a unit needs one travelled length per pose")
		}
	}
	for i := range ties {
		for _, e := range [2]End{ties[i].From, ties[i].To} {
			if e.Unit < 0 || e.Unit >= len(units) || e.Node < 0 || e.Node >= len(units[e.Unit].Poses) {
				panic("evidence: tie to a node that does not exist")
			}
		}
		if ties[i].From.Unit == ties[i].To.Unit {
			panic("evidence: tie within one unit")
		}
	}
}
