// Package robust decides which sightings of a pose graph are believed: sightings of marks, and ties that are less than a pose. Agents,
// coordinator and the adjustment in one piece decide by this one rule.
//
// A sighting is held when it agrees with what all other measurements predict, whether or not it is part of the solution: its
// innovation must stay below chi-square at one in a thousand ([Limit]). [Review] applies that to weights as they stand, refusing and
// letting in until nothing changes; it is what to call after new measurements. [Decide] begins from nothing, by graduated non-convexity
// (see [evidence.Schedule]), and ends with a review.
//
// The functions work on a [posegraph.Graph] through its solver. They change values and the weights of its sightings and nothing
// else; the same input gives the same output.
package robust
