package survey

import (
	"fmt"
	"strings"
)

// Violation is one place where the content of a survey breaks a rule.
type Violation struct {
	File     string // relative to the folder, with slashes
	Line     int    // from 1; 0 when the file as a whole is meant
	Column   string // of a table, or key of the YAML file; may be empty
	Found    string
	Expected string
}

// String returns "file:line: column NAME: found X, expected Y".
func (v Violation) String() string {
	var b strings.Builder
	b.WriteString(v.File)
	if v.Line > 0 {
		fmt.Fprintf(&b, ":%d", v.Line)
	}
	b.WriteString(": ")
	if v.Column != "" {
		kind := "column "
		if v.File == metaName {
			kind = "key "
		}
		b.WriteString(kind + v.Column + ": ")
	}
	b.WriteString("found " + v.Found + ", expected " + v.Expected)
	return b.String()
}

// Violations is the error of a folder whose content breaks the rules.
type Violations struct {
	List  []Violation // the first of each file, in reading order
	Total int         // exact, also when List is shorter
}

// shownPerFile is how many violations of one file are kept for showing.
const shownPerFile = 20

// Error lists the violations one a line.
func (v *Violations) Error() string {
	var b strings.Builder
	for i, x := range v.List {
		if i > 0 {
			b.WriteByte('\n')
		}
		b.WriteString(x.String())
	}
	if v.Total > len(v.List) {
		fmt.Fprintf(&b, "\n%d violations in all, %d shown", v.Total, len(v.List))
	}
	return b.String()
}

// sink collects violations and warnings while a folder is read.
type sink struct {
	Violations
	warnings []string
	file     string // the file of the last violation
	inFile   int    // its violations so far
}

func (s *sink) add(v Violation) {
	if v.File != s.file {
		s.file, s.inFile = v.File, 0
	}
	s.Total++
	s.inFile++
	if s.inFile <= shownPerFile {
		s.List = append(s.List, v)
	}
}

func (s *sink) warn(format string, args ...any) {
	s.warnings = append(s.warnings, fmt.Sprintf(format, args...))
}

// err returns the violations as an error, nil when there is none.
func (s *sink) err() error {
	if s.Total == 0 {
		return nil
	}
	return &s.Violations
}

// quote shows a piece of input in a message, shortened.
func quote(b string) string {
	const most = 48
	if len(b) > most {
		return fmt.Sprintf("%q and %d bytes more", b[:most], len(b)-most)
	}
	return fmt.Sprintf("%q", b)
}
