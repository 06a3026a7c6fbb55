package survey

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/lexer"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"
)

// meta reads survey.yaml.
func (r *reader) meta() error {
	f, err := os.Open(filepath.Join(r.root, metaName))
	if errors.Is(err, fs.ErrNotExist) {
		r.sink.add(Violation{File: metaName, Found: "no such file", Expected: "a survey folder, which has one"})
		return nil
	}
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, maxYAMLBytes+1))
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	r.survey.Meta = decodeMeta(data, &r.sink)
	return nil
}

// decodeMeta decodes and checks the content of survey.yaml, telling the sink
// what is wrong with it.
func decodeMeta(data []byte, s *sink) (m Meta) {
	report := func(line int, path, found, expected string) {
		s.add(Violation{File: metaName, Line: line, Column: path, Found: found, Expected: expected})
	}
	if len(data) > maxYAMLBytes {
		report(0, "", fmt.Sprintf("more than %d bytes", maxYAMLBytes), "a smaller file")
		return m
	}
	// The decoder is not ours: what it cannot stand is kept from it by
	// plainYAML, and should it still panic, then the file is at fault.
	defer func() {
		if p := recover(); p != nil {
			report(0, "", "text that cannot be decoded", "YAML")
		}
	}()
	tokens := lexer.Tokenize(string(data))
	if line, found := plainYAML(tokens); found != "" {
		report(line, "", found, "plain YAML: block or flow mappings and sequences, no anchors, aliases, merges, tags or ? keys, nesting of at most "+fmt.Sprint(maxYAMLDepth))
		return m
	}
	file, err := parser.Parse(tokens, 0)
	if err != nil {
		reportYAML(err, report)
		return m
	}
	if len(file.Docs) != 1 || file.Docs[0].Body == nil {
		report(0, "", "no keys", "format, name, dimension, datum and robots")
		return m
	}
	// The version first: a later one may have keys unknown here.
	if node := find(file, "format"); node != nil {
		if text := node.String(); text != fmt.Sprint(formatVersion) {
			report(lineOf(node), "format", quote(text), fmt.Sprintf("%d, the version that this program reads", formatVersion))
			return m
		}
	}
	if err := yaml.NewDecoder(bytes.NewReader(data), yaml.Strict()).Decode(&m); err != nil {
		reportYAML(err, report)
		return m
	}
	m.check(func(path, found, expected string) {
		report(nearestLine(file, path), path, found, expected)
	})
	return m
}

const maxYAMLDepth = 16

// plainYAML returns the line and a description of the first thing that
// survey.yaml has no use for and that could make decoding costly: aliases that
// multiply, tags, and deep nesting.
func plainYAML(tokens token.Tokens) (line int, found string) {
	depth, documents := 0, 0
	dashes, dashLine := 0, 0
	for _, t := range tokens {
		line = t.Position.Line
		switch t.Type {
		case token.AnchorType, token.AliasType, token.MergeKeyType, token.TagType, token.MappingKeyType, token.DirectiveType:
			return line, quote(t.Value)
		case token.DocumentHeaderType:
			if documents++; documents > 1 {
				return line, "a second document"
			}
		case token.SequenceStartType, token.MappingStartType:
			depth++
		case token.SequenceEndType, token.MappingEndType:
			depth--
		case token.SequenceEntryType:
			if line != dashLine {
				dashes, dashLine = 0, line
			}
			dashes++
		case token.MappingValueType:
			if t.Position.Column > maxLineBytes {
				return line, "a key far to the right"
			}
		}
		if depth > maxYAMLDepth || dashes > maxYAMLDepth {
			return line, "nesting of more than " + fmt.Sprint(maxYAMLDepth)
		}
	}
	return 0, ""
}

// reportYAML reports an error of the YAML parser or decoder with its line.
func reportYAML(err error, report func(line int, path, found, expected string)) {
	var y yaml.Error
	if !errors.As(err, &y) {
		report(0, "", firstLine(err.Error()), "YAML as described in the reference")
		return
	}
	line := 0
	if t := y.GetToken(); t != nil && t.Position != nil {
		line = t.Position.Line
	}
	expected := "a value of the right kind"
	var unknown *yaml.UnknownFieldError
	var syntax *yaml.SyntaxError
	var duplicate *yaml.DuplicateKeyError
	switch {
	case errors.As(err, &unknown):
		expected = "only known keys"
	case errors.As(err, &duplicate):
		expected = "each key once"
	case errors.As(err, &syntax):
		expected = "YAML"
	}
	report(line, "", firstLine(y.GetMessage()), expected)
}

func firstLine(s string) string {
	s, _, _ = strings.Cut(s, "\n")
	return quote(s)
}

// find returns the value at a path such as robots[1].id, nil when the file has
// none.
func find(file *ast.File, path string) ast.Node {
	p, err := yaml.PathString("$." + path)
	if err != nil {
		return nil
	}
	node, err := p.FilterFile(file)
	if err != nil {
		return nil
	}
	return node
}

func lineOf(node ast.Node) int {
	if t := node.GetToken(); t != nil && t.Position != nil {
		return t.Position.Line
	}
	return 0
}

// nearestLine returns the line of the value at path or, when it is absent, of
// what it should be part of; 0 for the file as a whole.
func nearestLine(file *ast.File, path string) int {
	for path != "" {
		if node := find(file, path); node != nil {
			return lineOf(node)
		}
		path = path[:max(0, strings.LastIndexAny(path, ".["))]
	}
	return 0
}

// encodeMeta returns the content of survey.yaml.
func encodeMeta(m *Meta) ([]byte, error) {
	for _, style := range []yaml.EncodeOption{yaml.UseLiteralStyleIfMultiline(true), yaml.JSON()} {
		data, err := yaml.MarshalWithOptions(m, yaml.IndentSequence(true), style)
		if err != nil {
			return nil, fmt.Errorf("survey: %s: %w", metaName, err)
		}
		// A few texts, such as notes that begin with blanks, do not come back
		// from the style that is easiest to read.
		var s sink
		if back := decodeMeta(data, &s); s.Total == 0 && sameMeta(&back, m) {
			return data, nil
		}
	}
	return nil, fmt.Errorf("survey: %s: some text in it cannot be written as YAML", metaName)
}
