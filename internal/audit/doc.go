// Package audit puts the figures of a finished survey together: which ties hold the map, which of them the others check and how well,
// how large an error could hide in each and how far it would move the map, which loops close and by how much, whether the stated
// sigmas were met, which marks and control points do not lie where they should, and where the fleet should go next.
//
// [Run] adjusts the survey in one piece with the ties that are held and reads everything from that solution and its factor; what a
// graph search can decide (bridges, sets that no test can tell apart, places that carry a part of the fleet alone) is decided by
// search, not by numbers. Sightings of marks and ties that are less than a pose are part of the adjustment where they fit the others;
// what they hold of two frames is a matter of rank. [Audit.Write] leaves ties.csv, audit.json and audit.html.
//
// Figures are of first order at the solution, with the sigmas as stated, and conditional on the verdicts: what was refused was
// not found sound by the same figures.
package audit
