package msgs

import (
	"errors"
	"fmt"
	"strconv"
)

// FieldError says which field of which kind of message is wrong.
type FieldError struct {
	Kind  string // kind of message, as in a subject
	Field string // path to the field, such as parts[2].junctions[5].pose
	Found string
	Want  string
}

func (e *FieldError) Error() string {
	return fmt.Sprintf("%s: %s: found %s, expected %s", e.Kind, e.Field, e.Found, e.Want)
}

// VersionError refuses a message of a newer major version. Its text is meant for people.
type VersionError struct {
	Kind         string
	Major, Minor uint32
}

func (e *VersionError) Error() string {
	return fmt.Sprintf("%s: version: found message format %d.%d, expected %d.x: the sender runs a newer Selvage than this one, "+
		"which must be brought up to date before the two can talk", e.Kind, e.Major, e.Minor, Major)
}

// wrong is a FieldError whose kind is filled in by ofKind and whose path by at, on the way out.
func wrong(field string, found any, want string, args ...any) error {
	return &FieldError{Field: field, Found: fmt.Sprint(found), Want: fmt.Sprintf(want, args...)}
}

// at puts element i of a list before the path of an error.
func at(err error, list string, i int) error {
	var fe *FieldError
	if errors.As(err, &fe) {
		fe.Field = list + "[" + strconv.Itoa(i) + "]." + fe.Field
	}
	return err
}

// in puts a field before the path of an error.
func in(err error, field string) error {
	var fe *FieldError
	if errors.As(err, &fe) {
		fe.Field = field + "." + fe.Field
	}
	return err
}

func ofKind(kind string, err error) error {
	var fe *FieldError
	if errors.As(err, &fe) {
		fe.Kind = kind
	}
	return err
}

// clip keeps what a stranger wrote short and printable in an error.
func clip(s string) string {
	const most = 48
	if len(s) > most {
		return strconv.Quote(s[:most]) + "..."
	}
	return strconv.Quote(s)
}
