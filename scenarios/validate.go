package scenarios

import (
	"fmt"
	"math"
	"reflect"
	"slices"
	"strings"
	"unicode"
	"unicode/utf8"
)

// validate checks every field against its tag and then the rules between fields. Where d is given it knows the places.
func (sc *Scenario) validate(d *loader) (errs FieldErrors) {
	report := func(path, message string) {
		e := FieldError{Path: path, Message: message}
		if d != nil {
			e.File = d.file
			if p := d.places[path]; p != nil {
				e.Line, e.Column = p.Line, p.Column
			}
		}
		errs = append(errs, e)
	}
	checkFields(reflect.ValueOf(sc).Elem(), "", report)
	if len(errs) == 0 { // the rules take sound fields for granted
		sc.rules(report)
	}
	return errs
}

func checkFields(v reflect.Value, path string, report func(path, message string)) {
	for f := range fields(v.Type()) {
		checkValue(v.FieldByIndex(f.Index), f.Tag, join(path, f.Tag.Get("yaml")), report)
	}
}

func checkValue(v reflect.Value, tag reflect.StructTag, path string, report func(path, message string)) {
	switch v.Kind() {
	case reflect.Struct:
		checkFields(v, path, report)
	case reflect.Pointer:
		if !v.IsNil() {
			checkValue(v.Elem(), tag, path, report)
		}
	case reflect.Slice, reflect.Array:
		for i := range v.Len() {
			checkValue(v.Index(i), tag, index(path, i), report)
		}
	case reflect.Float64:
		checkRange(v.Float(), tag.Get("range"), path, report)
	case reflect.Int:
		checkRange(float64(v.Int()), tag.Get("range"), path, report)
	case reflect.String:
		checkText(v.String(), tag, path, report)
	}
}

func checkRange(x float64, rule, path string, report func(path, message string)) {
	lo, hi := bounds(rule)
	if !(x >= lo && x <= hi) { // also NaN
		report(path, fmt.Sprintf("found %v, expected %v to %v", x, lo, hi))
	}
}

// bounds reads a tag like "[0, 10]"; without one every finite number is within.
func bounds(rule string) (lo, hi float64) {
	if rule == "" {
		return -math.MaxFloat64, math.MaxFloat64
	}
	if n, err := fmt.Sscanf(rule, "[%g, %g]", &lo, &hi); n != 2 {
		panic("scenarios: range tag " + rule + ": " + err.Error())
	}
	return lo, hi
}

func checkText(s string, tag reflect.StructTag, path string, report func(path, message string)) {
	if words := strings.Fields(tag.Get("oneof")); len(words) > 0 {
		if !slices.Contains(words, s) {
			report(path, fmt.Sprintf("found %q, expected one of %s", clip(s), strings.Join(words, ", ")))
		}
		return
	}
	switch tag.Get("form") {
	case "id":
		other := func(r rune) bool {
			return !('a' <= r && r <= 'z' || 'A' <= r && r <= 'Z' || '0' <= r && r <= '9' || r == '_' || r == '-')
		}
		ok := s != "" && len(s) <= 32 && !strings.ContainsFunc(s, other) && s[0] != '-' && s[0] != '_'
		if !ok {
			report(path, fmt.Sprintf("found %q, expected 1 to 32 letters, digits, _ and -, the first a letter or digit", clip(s)))
		}
	case "text":
		bad := func(r rune) bool { return !unicode.IsPrint(r) }
		if s == "" || len(s) > 200 || !utf8.ValidString(s) || strings.ContainsFunc(s, bad) || s != strings.TrimSpace(s) {
			report(path, fmt.Sprintf("found %q, expected one line of printable text, 1 to 200 bytes", clip(s)))
		}
	}
}

// clip shortens input for a message.
func clip(s string) string {
	if len(s) > 40 {
		return s[:40] + "..."
	}
	return s
}
