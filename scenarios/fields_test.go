package scenarios

import (
	"flag"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"os"
	"reflect"
	"strings"
	"testing"
)

var update = flag.Bool("update", false, "write FIELDS.md anew")

// FIELDS.md is made from the comments and tags of scenario.go and from Default.
func TestFieldsPage(t *testing.T) {
	page := fieldsPage(t)
	if *update {
		if err := os.WriteFile("FIELDS.md", []byte(page), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	have, err := os.ReadFile("FIELDS.md")
	if err != nil {
		t.Fatal(err)
	}
	if string(have) != page {
		t.Error("FIELDS.md no longer matches scenario.go; run go test ./scenarios -run FieldsPage -update")
	}
}

func fieldsPage(t *testing.T) string {
	var b strings.Builder
	b.WriteString("# Fields of a scenario file\n\n" +
		"A scenario is one YAML document. Every field may be left out and then has its default; a field that is not listed here is an\n" +
		"error. Times are seconds, lengths metres, angles radians.\n\n" +
		"This page is made from the program: `go test ./scenarios -run FieldsPage -update`.\n")
	docs := fieldComments(t)
	writeFields(t, &b, docs, reflect.ValueOf(Default()).Elem(), "")
	return b.String()
}

func writeFields(t *testing.T, b *strings.Builder, docs map[string]string, v reflect.Value, path string) {
	heading := path
	if path == "" {
		heading = "top level"
	}
	fmt.Fprintf(b, "\n## %s\n\n", heading)
	if intro := docs[v.Type().Name()]; path != "" {
		fmt.Fprintf(b, "%s\n\n", strings.ToUpper(intro[:1])+intro[1:])
	}
	b.WriteString("| field | unit | default | allowed | meaning |\n|---|---|---|---|---|\n")
	type section struct {
		v    reflect.Value
		path string
	}
	var sections []section
	for f := range fields(v.Type()) {
		name, x := f.Tag.Get("yaml"), v.FieldByIndex(f.Index)
		doc := docs[v.Type().Name()+"."+f.Name]
		if doc == "" || name == "" {
			t.Errorf("field %s.%s lacks a comment or a name", v.Type().Name(), f.Name)
		}
		def, allowed := fmt.Sprint(x.Interface()), f.Tag.Get("range")
		switch {
		case f.Tag.Get("oneof") != "":
			allowed = strings.Join(strings.Fields(f.Tag.Get("oneof")), ", ")
		case f.Tag.Get("form") == "id":
			allowed = "letters, digits, _ and -"
		case f.Tag.Get("form") == "text":
			allowed = "one line of text"
		case x.Kind() == reflect.Uint64:
			allowed = "whole number"
		}
		switch x.Kind() {
		case reflect.Float64, reflect.Int:
			if allowed == "" {
				t.Errorf("field %s has no range", join(path, name))
			}
		case reflect.Struct:
			sections = append(sections, section{x, join(path, name)})
			def, allowed = "see "+join(path, name), ""
		case reflect.Slice:
			sections = append(sections, section{reflect.New(x.Type().Elem()).Elem(), join(path, name) + "[]"})
			def, allowed = "none", "at most "+f.Tag.Get("most")+" entries"
		case reflect.Pointer:
			def = "left out"
		}
		if strings.HasSuffix(path, "[]") {
			def = "none"
		}
		fmt.Fprintf(b, "| %s | %s | %s | %s | %s |\n", name, f.Tag.Get("unit"), def, allowed, doc)
	}
	for _, s := range sections {
		writeFields(t, b, docs, s.v, s.path)
	}
}

// fieldComments returns the comments of scenario.go by Type and Type.Field, each on one line. The comment of a type loses its
// subject: "MineSpec sizes a mine" becomes "sizes a mine".
func fieldComments(t *testing.T) map[string]string {
	file, err := parser.ParseFile(token.NewFileSet(), "scenario.go", nil, parser.ParseComments)
	if err != nil {
		t.Fatal(err)
	}
	line := func(g *ast.CommentGroup) string { return strings.Join(strings.Fields(g.Text()), " ") }
	docs := map[string]string{}
	for _, d := range file.Decls {
		g, ok := d.(*ast.GenDecl)
		if !ok || g.Tok != token.TYPE {
			continue
		}
		for _, spec := range g.Specs {
			typ := spec.(*ast.TypeSpec)
			text := strings.TrimPrefix(line(g.Doc), typ.Name.Name+" ")
			docs[typ.Name.Name] = strings.TrimPrefix(strings.TrimPrefix(text, "are "), "is ")
			for _, f := range typ.Type.(*ast.StructType).Fields.List {
				docs[typ.Name.Name+"."+f.Names[0].Name] = line(f.Doc)
			}
		}
	}
	return docs
}
