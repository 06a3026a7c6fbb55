package config

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/lexer"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"
)

// FieldError is one thing wrong with a file.
type FieldError struct {
	File     string
	Line     int    // from 1; 0 where there is none to name
	Field    string // such as bus.url; empty for the file as a whole
	Found    string
	Expected string
}

func (e *FieldError) Error() string {
	at := e.File
	if e.Line > 0 {
		at = fmt.Sprintf("%s:%d", e.File, e.Line)
	}
	if e.Field != "" {
		at += ": " + e.Field
	}
	return fmt.Sprintf("%s: found %s, expected %s", at, e.Found, e.Expected)
}

// check gathers what is wrong with a file.
type check struct {
	name, folder string // of the file, and where its paths begin
	file         *ast.File
	wrong        []error
}

func (c *check) report(line int, field, found, expected string) {
	c.wrong = append(c.wrong, &FieldError{c.name, line, field, found, expected})
}

// demand reports a field that does not keep a rule, on its line or that of the closest field around it.
func (c *check) demand(ok bool, field, found, expected string) {
	if ok {
		return
	}
	line := 0
	for at := field; line == 0 && at != ""; {
		if p, err := yaml.PathString("$." + at); err == nil {
			if n, err := p.FilterFile(c.file); err == nil && n != nil && n.GetToken() != nil {
				line = n.GetToken().Position.Line
			}
		}
		at = at[:max(strings.LastIndexAny(at, ".["), 0)]
	}
	c.report(line, field, found, expected)
}

// quote shows what a field says.
func quote(s string) string {
	if s == "" {
		return "nothing"
	}
	return fmt.Sprintf("%.100q", s)
}

// Bounds on a file; the parser takes time that grows faster than either.
const (
	maxFile  = 1 << 18
	maxDepth = 8
)

// read decodes a file and has it checked by its rules, which may complete it.
func read[T any](path string, rules func(*T, *check)) (*T, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, maxFile+1))
	if err != nil {
		return nil, err
	}
	folder, err := filepath.Abs(filepath.Dir(path))
	if err != nil {
		return nil, err
	}
	v, c := new(T), &check{name: path, folder: folder}
	c.decode(data, v)
	if len(c.wrong) == 0 {
		rules(v, c)
	}
	if len(c.wrong) > 0 {
		slices.SortStableFunc(c.wrong, func(a, b error) int { return a.(*FieldError).Line - b.(*FieldError).Line })
		return nil, errors.Join(c.wrong...)
	}
	return v, nil
}

func (c *check) decode(data []byte, v any) {
	if len(data) > maxFile {
		c.report(0, "", fmt.Sprintf("more than %d bytes", maxFile), "a smaller file")
		return
	}
	defer func() { // should the decoder not stand it, then the file is at fault
		if p := recover(); p != nil {
			c.report(0, "", "text that cannot be decoded", "YAML")
		}
	}()
	tokens := lexer.Tokenize(string(data))
	depth := 0
	for _, t := range tokens {
		switch t.Type {
		case token.AnchorType, token.AliasType, token.MergeKeyType, token.TagType, token.MappingKeyType, token.DirectiveType, token.DocumentHeaderType:
			c.report(t.Position.Line, "", fmt.Sprintf("%.40q", t.Value), "plain fields and lists")
			return
		case token.SequenceStartType, token.MappingStartType:
			depth++
		case token.SequenceEndType, token.MappingEndType:
			depth--
		}
		if depth > maxDepth || t.Position.Column > 1<<10 {
			c.report(t.Position.Line, "", "a long line or deep nesting", "plain fields and lists")
			return
		}
	}
	file, err := parser.Parse(tokens, 0)
	if err == nil {
		c.file = file
		err = yaml.NewDecoder(bytes.NewReader(data), yaml.Strict()).Decode(v)
	}
	var y yaml.Error
	switch {
	case err == nil:
	case errors.As(err, &y):
		line := 0
		if t := y.GetToken(); t != nil && t.Position != nil {
			line = t.Position.Line
		}
		c.report(line, "", y.GetMessage(), "YAML with the fields of such a file")
	case errors.Is(err, io.EOF):
		c.report(0, "", "nothing", "YAML with the fields of such a file")
	default:
		text, _, _ := strings.Cut(err.Error(), "\n")
		c.report(0, "", text, "YAML with the fields of such a file")
	}
}
