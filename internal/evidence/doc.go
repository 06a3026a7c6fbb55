// Package evidence decides which inter-robot ties, and which loop closures, are believed. Ties are judged from nothing but the ties
// themselves and the relative poses that every robot knows of its own track. There is no prior on where the robots' frames lie.
//
// An alignment that is wrong is worse than none, so every finding is one of three: held (part of the solution), refused
// (contradicted by what is held) and open (not enough evidence either way). The way there:
//
//  1. Two ties of one pair of units close a loop through both tracks. Its misclosure is tested against the covariance
//     carried around the loop, widened by an odometry bias that no covariance knows of (pairwise consistency: Mangelson,
//     Dominic, Eustice, Vasudevan, "Pairwise consistent measurement set maximization for robust multi-robot map merging",
//     ICRA 2018).
//  2. The largest sets of mutually consistent ties, up to three disjoint ones per pair, are the hypotheses on how the two
//     units lie to each other. Their weight is the number of places they rest on, not the number of ties: ties of one place
//     share one recognition error.
//  3. All hypotheses of the fleet are weighed together. The best configuration of the units is searched for, and for each
//     hypothesis the best configuration that contradicts it; the difference of the two is its margin. Cycles of units are
//     the strongest witnesses, but only over different places: where one place looks like another, all robots err alike.
//  4. What has a margin, and is not to be expected by chance (a contrario: Desolneux, Moisan, Morel, "Meaningful
//     alignments", IJCV 40(1), 2000), is held. Every other tie is then tested against the prediction from the ties held.
//
// What no method can do: a false set that outnumbers the true ties of its pair, and meets no cycle, cannot be told from the
// truth. Such pairs stay open until a third unit or another place bears witness.
//
// The loop closures within one session are judged the same way, by the robot itself ([Chain.Judge]): closures that agree with each
// other, over the ways along the session's own odometry.
//
// Chance is bounded, look-alike structure is not: where long aisles repeat themselves, the margins asked for here are the
// only protection, and a person should look at pairs whose findings say that no third unit confirms them.
package evidence
