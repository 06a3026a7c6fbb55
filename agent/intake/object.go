package intake

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"unicode/utf8"
)

// Fault is what is wrong with a line.
type Fault struct {
	Field           string // empty when it is the line as a whole
	Found, Expected string
}

func (f *Fault) Error() string {
	text := fmt.Sprintf("found %s, expected %s", f.Found, f.Expected)
	if f.Field != "" {
		text = f.Field + ": " + text
	}
	return text
}

// object is one flat JSON object whose fields are taken one by one. It keeps the first fault; after it what is taken is zero.
type object struct {
	fields map[string]any // string, json.Number, bool, nil, or []json.Number
	fault  *Fault
}

// parse reads a line. A field that comes twice, nested objects and what follows the object are refused.
func parse(line []byte) (*object, *Fault) {
	const one = "one JSON object of plain fields in a line"
	if !utf8.Valid(line) {
		return nil, &Fault{"", "bytes that are no UTF-8", one}
	}
	d := json.NewDecoder(bytes.NewReader(line))
	d.UseNumber()
	if t, err := d.Token(); err != nil || t != json.Delim('{') {
		return nil, &Fault{"", described(t, err), one}
	}
	o := &object{fields: map[string]any{}}
	for d.More() {
		t, err := d.Token()
		if err != nil {
			return nil, &Fault{"", described(t, err), one}
		}
		name := t.(string) // the decoder has no other names
		if _, twice := o.fields[name]; twice {
			return nil, &Fault{clip(name), "the field a second time", "every field once"}
		}
		if t, err = d.Token(); err != nil {
			return nil, &Fault{clip(name), described(t, err), one}
		}
		if t != json.Delim('[') {
			if _, nested := t.(json.Delim); nested {
				return nil, &Fault{clip(name), described(t, nil), "a plain value"}
			}
			o.fields[name] = t
			continue
		}
		list := []json.Number{}
		for d.More() {
			t, err := d.Token()
			n, ok := t.(json.Number)
			if err != nil || !ok {
				return nil, &Fault{clip(name), described(t, err), "a list of numbers"}
			}
			list = append(list, n)
		}
		if t, err := d.Token(); err != nil {
			return nil, &Fault{clip(name), described(t, err), one}
		}
		o.fields[name] = list
	}
	if t, err := d.Token(); err != nil {
		return nil, &Fault{"", described(t, err), one}
	}
	if t, err := d.Token(); !errors.Is(err, io.EOF) {
		return nil, &Fault{"", described(t, err) + " behind the object", one}
	}
	return o, nil
}

// described says what a token is.
func described(t json.Token, err error) string {
	switch v := t.(type) {
	case nil:
		if errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
			return "the end of the line"
		}
		if err != nil {
			return "no JSON (" + clip(err.Error()) + ")"
		}
		return "null"
	case string:
		return strconv.Quote(clip(v))
	case []json.Number:
		return fmt.Sprintf("a list of %d numbers", len(v))
	}
	return clip(fmt.Sprint(t))
}

// clip keeps a text of others short.
func clip(s string) string {
	if len(s) > 60 {
		s = strings.ToValidUTF8(s[:60], "") + "..."
	}
	return s
}

func (o *object) refuse(field, found, expected string) {
	if o.fault == nil {
		o.fault = &Fault{field, found, expected}
	}
}

// has tells whether a field is there and not null.
func (o *object) has(field string) bool { return o.fields[field] != nil }

// take returns the value of a field, nil after complaining when it is not there.
func (o *object) take(field, expected string) any {
	v, ok := o.fields[field]
	delete(o.fields, field)
	if !ok || v == nil {
		found := "null"
		if !ok {
			found = "no such field"
		}
		o.refuse(field, found, expected)
	}
	return v
}

// integer takes an integer from lo to hi.
func (o *object) integer(field string, lo, hi int64) int64 {
	expected := fmt.Sprintf("an integer from %d to %d", lo, hi)
	if lo == math.MinInt64 {
		expected = "an integer of 64 bits"
	}
	v := o.take(field, expected)
	if v == nil {
		return 0
	}
	if n, ok := v.(json.Number); ok {
		if x, err := strconv.ParseInt(string(n), 10, 64); err == nil && lo <= x && x <= hi {
			return x
		}
	}
	o.refuse(field, described(v, nil), expected)
	return 0
}

func (o *object) int64(field string) int64 { return o.integer(field, math.MinInt64, math.MaxInt64) }

func (o *object) session(field string) uint32 {
	return uint32(o.integer(field, 0, math.MaxUint32))
}

// number takes a finite number from lo to hi.
func (o *object) number(field string, lo, hi float64) float64 {
	expected := fmt.Sprintf("a number from %g to %g", lo, hi)
	v := o.take(field, expected)
	if v == nil {
		return 0
	}
	if n, ok := v.(json.Number); ok {
		if x, err := strconv.ParseFloat(string(n), 64); err == nil && lo <= x && x <= hi {
			return x
		}
	}
	o.refuse(field, described(v, nil), expected)
	return 0
}

// list takes a list of n finite numbers.
func (o *object) list(field string, n int) []float64 {
	expected := fmt.Sprintf("a list of %d numbers", n)
	out := make([]float64, n)
	v := o.take(field, expected)
	if v == nil {
		return out
	}
	l, ok := v.([]json.Number)
	if !ok || len(l) != n {
		o.refuse(field, described(v, nil), expected)
		return out
	}
	for i, x := range l {
		var err error
		if out[i], err = strconv.ParseFloat(string(x), 64); err != nil {
			o.refuse(field, clip(string(x)), "finite numbers")
		}
	}
	return out
}

// text takes a text of at most so many bytes.
func (o *object) text(field string, most int) string {
	expected := fmt.Sprintf("a text of 1 to %d bytes", most)
	v := o.take(field, expected)
	if v == nil {
		return ""
	}
	s, ok := v.(string)
	if !ok || s == "" || len(s) > most {
		o.refuse(field, described(v, nil), expected)
	}
	return s
}

// optional takes a text that may be missing.
func (o *object) optional(field string, most int) string {
	if !o.has(field) {
		delete(o.fields, field)
		return ""
	}
	return o.text(field, most)
}

// end complains about a field that nobody has taken.
func (o *object) end(event string) *Fault {
	if o.fault == nil && len(o.fields) > 0 {
		var left []string
		for name := range o.fields {
			left = append(left, name)
		}
		name := slices.Min(left)
		o.refuse(clip(name), "a field that has no meaning here", "none of that name in "+event)
	}
	return o.fault
}
