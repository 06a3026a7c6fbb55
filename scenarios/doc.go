// Package scenarios is the workshop of Selvage: sites, fleets, front ends, faults and radio that exist only as numbers drawn
// from a seed.
//
// A scenario is a YAML file ([Load], [Builtin]); FIELDS.md beside this file lists every field with its unit, default and range.
// [Simulate] turns a scenario and a seed into a [World]: a survey with its truth, the ties that are false, and for each robot
// the order and the times at which its front end delivers what it measures. [Radio] decides when a message arrives, if it does.
//
// From the site to the survey:
//
//	site       corridors as a graph of centre lines: drifts of a mine, aisles of a store, tracks in a wood
//	walk       each robot goes from goal to goal around its home, keeps to its side of the corridor, turns smoothly
//	front end  odometry with noise at each step and a heading bias, loop closures where the robot comes back;
//	           a front end that restarts begins a new session
//	ties       where robots meet and where one passes the track of another
//	false ties single ones between unrelated places, and clusters that agree with each other as look-alike places do
//
// The same scenario and seed give the same bytes on the same processor. Every part draws from a stream of its own, named after
// the part, so that a change in one leaves the draws of the others as they were.
//
// Lengths are metres, angles radians, times seconds in scenario files and nanoseconds since the start of the outing elsewhere.
package scenarios
