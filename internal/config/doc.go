// Package config reads what the computers of a fleet are told by file: [Agent] is agent.yaml on a robot, [Base] is base.yaml at the
// base, and [Roster] is robots.yaml beside it, the list of who is enrolled, which only the program writes.
//
// Files are read strictly: a field that is not known, missing or of the wrong kind is an error that names file and line. Paths in a
// file that are not absolute begin at the folder of the file.
package config
