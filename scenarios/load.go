package scenarios

import (
	"cmp"
	"fmt"
	"math"
	"reflect"
	"slices"
	"strconv"
	"strings"

	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"
)

// FieldError is one thing wrong with a scenario.
type FieldError struct {
	File         string // as named by the caller; empty for a scenario made in code
	Line, Column int    // from 1; 0 where the field does not stand in a file
	Path         string // fleet.robots
	Message      string // what was found and what was expected
}

// Error returns "file:line:column: path: message".
func (e FieldError) Error() string {
	var b strings.Builder
	if e.File != "" {
		b.WriteString(e.File + ":")
		if e.Line > 0 {
			fmt.Fprintf(&b, "%d:%d:", e.Line, e.Column)
		}
		b.WriteByte(' ')
	}
	if e.Path != "" {
		b.WriteString(e.Path + ": ")
	}
	return b.String() + e.Message
}

// FieldErrors is everything wrong with a scenario, in the order of the file.
type FieldErrors []FieldError

// Error lists the errors one a line.
func (e FieldErrors) Error() string {
	lines := make([]string, len(e))
	for i := range e {
		lines[i] = e[i].Error()
	}
	return strings.Join(lines, "\n")
}

func (e FieldErrors) orNil() error {
	if len(e) == 0 {
		return nil
	}
	return e
}

// maxFile bounds a scenario file and maxOpen the brackets open at once in it, because the parser takes time that grows with the
// square of either; maxErrors bounds what is reported.
const (
	maxFile   = 32 << 10
	maxOpen   = 32
	maxErrors = 100
)

// deepest returns how many brackets are open at once, those in texts counted with the others.
func deepest(data []byte) (most int) {
	open := 0
	for _, c := range data {
		switch c {
		case '[', '{':
			open++
			most = max(most, open)
		case ']', '}':
			open = max(0, open-1)
		}
	}
	return most
}

// Load reads a scenario from YAML laid over [Default]; name stands in error messages. Unknown fields are errors; all errors
// are reported at once, as [FieldErrors].
func Load(data []byte, name string) (*Scenario, error) {
	d := loader{file: name, places: map[string]*token.Position{}}
	if len(data) > maxFile {
		d.report(nil, "", fmt.Sprintf("the file has %d bytes, expected at most %d", len(data), maxFile))
		return nil, d.errors
	}
	if n := deepest(data); n > maxOpen {
		d.report(nil, "", fmt.Sprintf("%d brackets are open at once, expected at most %d", n, maxOpen))
		return nil, d.errors
	}
	file, err := parser.ParseBytes(data, 0)
	if err != nil {
		pos, message := syntaxError(err)
		d.report(pos, "", message)
		return nil, d.errors
	}
	sc := Default()
	switch {
	case len(file.Docs) > 1:
		d.report(nil, "", fmt.Sprintf("the file holds %d documents, expected one", len(file.Docs)))
	case len(file.Docs) == 1 && file.Docs[0].Body != nil:
		d.value(file.Docs[0].Body, reflect.ValueOf(sc).Elem(), "", "")
	}
	d.errors = append(d.errors, sc.validate(&d)...)
	slices.SortStableFunc(d.errors, func(a, b FieldError) int {
		return cmp.Or(cmp.Compare(a.Line, b.Line), cmp.Compare(a.Column, b.Column))
	})
	if len(d.errors) > maxErrors {
		d.errors = append(d.errors[:maxErrors], FieldError{File: name, Message: fmt.Sprintf("%d more errors", len(d.errors)-maxErrors)})
	}
	if len(d.errors) > 0 {
		return nil, d.errors
	}
	return sc, nil
}

// syntaxError takes position and message from an error of the YAML parser.
func syntaxError(err error) (*token.Position, string) {
	if e, ok := err.(interface {
		GetToken() *token.Token
		GetMessage() string
	}); ok {
		if t := e.GetToken(); t != nil {
			return t.Position, "not YAML: " + e.GetMessage()
		}
		return nil, "not YAML: " + e.GetMessage()
	}
	return nil, "not YAML: " + strings.ReplaceAll(err.Error(), "\n", " ")
}

// loader decodes nodes into fields and remembers where each field stands.
type loader struct {
	file   string
	places map[string]*token.Position
	errors FieldErrors
}

func (d *loader) report(at *token.Position, path, message string) {
	e := FieldError{File: d.file, Path: path, Message: message}
	if at != nil {
		e.Line, e.Column = at.Line, at.Column
	}
	d.errors = append(d.errors, e)
}

// value decodes one node into v, whose path and list bound are given.
func (d *loader) value(n ast.Node, v reflect.Value, path, most string) {
	at := n.GetToken().Position
	if path != "" {
		d.places[path] = at
	}
	wrong := func(expected string) {
		found := n.Type().String()
		if t := strings.TrimSpace(n.GetToken().Value); n.Type() != ast.MappingType && n.Type() != ast.SequenceType && len(t) <= 40 {
			found = strconv.Quote(t)
		}
		d.report(at, path, fmt.Sprintf("found %s, expected %s", found, expected))
	}
	switch v.Kind() {
	case reflect.Pointer:
		v.Set(reflect.New(v.Type().Elem()))
		d.value(n, v.Elem(), path, most)
	case reflect.Struct:
		switch m := n.(type) {
		case *ast.MappingNode:
			d.mapping(m.Values, v, path)
		case *ast.MappingValueNode:
			d.mapping([]*ast.MappingValueNode{m}, v, path)
		default:
			wrong("fields: " + strings.Join(fieldNames(v.Type()), ", "))
		}
	case reflect.Slice, reflect.Array:
		s, ok := n.(*ast.SequenceNode)
		if !ok {
			wrong("a list")
			return
		}
		count := v.Len()
		if v.Kind() == reflect.Slice {
			count, _ = strconv.Atoi(most)
		}
		if len(s.Values) > count || v.Kind() == reflect.Array && len(s.Values) != count {
			rule := "at most "
			if v.Kind() == reflect.Array {
				rule = ""
			}
			d.report(at, path, fmt.Sprintf("found %d entries, expected %s%d", len(s.Values), rule, count))
			return
		}
		if v.Kind() == reflect.Slice {
			v.Set(reflect.MakeSlice(v.Type(), len(s.Values), len(s.Values)))
		}
		for i, e := range s.Values {
			d.value(e, v.Index(i), index(path, i), "")
		}
	case reflect.String:
		s, ok := n.(*ast.StringNode)
		if !ok {
			wrong("text")
			return
		}
		v.SetString(s.Value)
	case reflect.Float64:
		switch x := n.(type) {
		case *ast.FloatNode:
			v.SetFloat(x.Value)
		case *ast.IntegerNode:
			switch i := x.Value.(type) {
			case int64:
				v.SetFloat(float64(i))
			case uint64:
				v.SetFloat(float64(i))
			}
		case *ast.StringNode: // 1e2, a number in YAML 1.2 but not to the parser
			plain := x.Token.Type == token.StringType && strings.Trim(x.Value, "0123456789.eE+-") == ""
			if f, err := strconv.ParseFloat(x.Value, 64); plain && err == nil {
				v.SetFloat(f)
				break
			}
			wrong("a number")
		default:
			wrong("a number")
		}
	case reflect.Int, reflect.Uint64:
		d.integer(n, v, wrong)
	default:
		panic("scenarios: no decoder for " + v.Kind().String())
	}
}

func (d *loader) integer(n ast.Node, v reflect.Value, wrong func(string)) {
	x, ok := n.(*ast.IntegerNode)
	if !ok {
		wrong("a whole number")
		return
	}
	switch i := x.Value.(type) {
	case int64:
		if v.Kind() == reflect.Int {
			v.SetInt(i)
			return
		}
		if i >= 0 {
			v.SetUint(uint64(i))
			return
		}
	case uint64:
		if v.Kind() == reflect.Uint64 {
			v.SetUint(i)
			return
		}
		if i <= math.MaxInt64 {
			v.SetInt(int64(i))
			return
		}
	}
	if v.Kind() == reflect.Uint64 {
		wrong("a whole number from 0 to 18446744073709551615")
		return
	}
	wrong("a smaller whole number")
}

func (d *loader) mapping(values []*ast.MappingValueNode, v reflect.Value, path string) {
	for _, kv := range values {
		at := kv.Key.GetToken().Position
		key, ok := kv.Key.(*ast.StringNode)
		if !ok {
			d.report(at, path, fmt.Sprintf("found %q as the name of a field, expected plain text", kv.Key.GetToken().Value))
			continue
		}
		name := key.Value
		f, ok := fieldNamed(v.Type(), name)
		if !ok {
			d.report(at, join(path, name), "unknown field, expected one of "+strings.Join(fieldNames(v.Type()), ", "))
			continue
		}
		if _, empty := kv.Value.(*ast.NullNode); empty {
			d.report(at, join(path, name), "is empty, expected a value (or leave the field out)")
			continue
		}
		d.value(kv.Value, v.FieldByIndex(f.Index), join(path, name), f.Tag.Get("most"))
	}
}

func fieldNamed(t reflect.Type, name string) (reflect.StructField, bool) {
	for f := range fields(t) {
		if f.Tag.Get("yaml") == name {
			return f, true
		}
	}
	return reflect.StructField{}, false
}

func fields(t reflect.Type) func(yield func(reflect.StructField) bool) {
	return func(yield func(reflect.StructField) bool) {
		for i := range t.NumField() {
			if !yield(t.Field(i)) {
				return
			}
		}
	}
}

func fieldNames(t reflect.Type) (names []string) {
	for f := range fields(t) {
		names = append(names, f.Tag.Get("yaml"))
	}
	return names
}

func join(path, name string) string {
	if path == "" {
		return name
	}
	return path + "." + name
}

func index(path string, i int) string { return path + "[" + strconv.Itoa(i) + "]" }
