// Package intake takes what a robot's front end tells: lines of JSON on a socket or on standard input, each a row as the survey folder
// has it. INTAKE.md beside the agent describes them.
//
// A line either becomes an event that the agent has taken and the disk has, and is answered by {"ok":N}, or it changes nothing and is
// answered by {"error":...} with the line, the field, what was found and what was expected. What comes in one go is handed over in
// one go, so that the wait for the disk is shared.
package intake
