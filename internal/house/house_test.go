// Package house holds the rules of the house as tests: which room may import which, what the pure cores keep away from, and how
// packages introduce themselves. It has no code of its own.
package house

import (
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
)

const module = "selvage/"

// Rooms, from the ground up: what each may import of the module. A package that is not listed here has to be given its place first.
var (
	ground     = []string{"internal/lie", "internal/sparse"}
	estimation = append([]string{"internal/posegraph", "internal/evidence", "internal/robust", "internal/reliability"}, ground...)
	cores      = append([]string{"partition", "msgs"}, estimation...) // what a protocol core may build on
	outside    = []string{"internal/bus", "internal/keys", "internal/journal", "internal/door", "internal/survey", "internal/report"}
	below      = append(append([]string{"internal/adjust", "agent", "agent/intake", "agent/record", "agent/shell", "coordinator", "coordinator/shell"}, outside...), cores...)

	rooms = map[string][]string{
		"internal/lie":         nil,
		"internal/sparse":      nil,
		"internal/bus":         nil,
		"internal/keys":        nil,
		"internal/door":        {"internal/keys", "msgs"},
		"internal/config":      {"internal/keys"},
		"internal/enrol":       {"internal/config", "internal/keys"},
		"internal/journal":     nil,
		"internal/survey":      nil,
		"internal/report":      nil,
		"internal/house":       nil,
		"internal/posegraph":   ground,
		"internal/evidence":    {"internal/lie"},
		"internal/robust":      append([]string{"internal/posegraph", "internal/evidence"}, ground...),
		"internal/adjust":      append([]string{"internal/survey"}, estimation...),
		"internal/reliability": nil,
		"internal/certificate": append([]string{"internal/posegraph"}, ground...),
		"internal/audit":       append([]string{"internal/adjust", "internal/certificate", "internal/survey", "internal/report"}, estimation...),
		"partition":            append([]string{"internal/posegraph"}, ground...),
		"msgs":                 {"msgs/internal/pb"},
		"msgs/internal/pb":     nil,
		"agent":                cores,
		"coordinator":          cores,
		"agent/intake":         append([]string{"agent", "internal/survey"}, cores...),
		"agent/record":         append([]string{"agent", "internal/journal"}, cores...),
		"agent/shell":          append(append([]string{"agent", "agent/record"}, outside...), cores...),
		"coordinator/shell":    append(append([]string{"coordinator"}, outside...), cores...),
		"scenarios":            append([]string{"internal/audit"}, below...),
		"cmd/selvage":          append([]string{"scenarios", "internal/audit", "internal/config", "internal/enrol"}, below...),
	}
)

// pure are the packages that give the same effects for the same events on a robot, in a container and in a simulation.
var pure = []string{"agent", "coordinator", "partition", "msgs", "internal/lie", "internal/sparse", "internal/posegraph", "internal/evidence", "internal/robust", "internal/reliability", "internal/certificate"}

// Why a pure package may not import a path, or one below it.
var forbidden = []struct{ path, why string }{
	{"net", "it reaches the network; a shell does that"},
	{"os", "it reaches the disk and the process; a shell does that"},
	{"io/fs", "it reaches the disk; a shell does that"},
	{"syscall", "it reaches the system; a shell does that"},
	{"log", "events are returned as effects; the shell logs them"},
	{"embed", "what a core needs is handed to it"},
	{"plugin", "what a core needs is handed to it"},
	{"crypto/rand", "random numbers come from a seeded source that is handed in"},
	{"math/rand", "random numbers come from a seeded source of math/rand/v2 that is handed in"},
}

// The modules of others that a pure package may use: they compute, and do nothing else.
var computing = []string{"gonum.org/v1/gonum", "google.golang.org/protobuf", "golang.org/x/sys/cpu"}

// What a pure package may not call, by import path; for math/rand/v2 what it may.
var (
	clock  = []string{"Now", "Since", "Until", "Sleep", "After", "AfterFunc", "Tick", "NewTimer", "NewTicker"}
	seeded = []string{"New", "NewPCG", "NewChaCha8", "NewZipf", "Rand", "Source", "PCG", "ChaCha8", "Zipf"}
)

// source is one file of Go.
type source struct {
	name string // relative to the module, with slashes
	file *ast.File
}

func (s *source) room() string { return path.Dir(s.name) }
func (s *source) test() bool   { return strings.HasSuffix(s.name, "_test.go") }

// imports returns the imported paths by the name that they have in the file.
func (s *source) imports() map[string]string {
	all := map[string]string{}
	for _, i := range s.file.Imports {
		p, err := strconv.Unquote(i.Path.Value)
		if err != nil {
			panic(err) // the parser has seen it
		}
		name := path.Base(p)
		if p == "math/rand/v2" {
			name = "rand"
		}
		if i.Name != nil {
			name = i.Name.Name
		}
		if name == "_" || name == "." {
			name += p
		}
		all[name] = p
	}
	return all
}

// arrows returns what is wrong with the imports of a file.
func (s *source) arrows() (wrong []string) {
	allowed, known := rooms[s.room()]
	if !known {
		return []string{"the house has no room " + s.room()}
	}
	for _, p := range sorted(s.imports()) {
		if !strings.HasPrefix(p, module) {
			continue
		}
		if room := strings.TrimPrefix(p, module); !slices.Contains(allowed, room) {
			wrong = append(wrong, "imports "+room+", which does not lie below it")
		}
	}
	return wrong
}

// impurities returns what a file has that a pure package must not have.
func (s *source) impurities() (wrong []string) {
	names := s.imports()
	for _, p := range sorted(names) {
		for _, f := range forbidden {
			if p == f.path || strings.HasPrefix(p, f.path+"/") && p != "math/rand/v2" {
				wrong = append(wrong, "imports "+p+": "+f.why)
			}
		}
		foreign := strings.Contains(strings.Split(p, "/")[0], ".")
		if foreign && !slices.ContainsFunc(computing, func(c string) bool { return p == c || strings.HasPrefix(p, c+"/") }) {
			wrong = append(wrong, "imports "+p+": not one of the modules that only compute")
		}
		if names["."+p] == p && (p == "time" || p == "math/rand/v2") {
			wrong = append(wrong, "imports "+p+" without a name")
		}
	}
	ast.Inspect(s.file, func(n ast.Node) bool {
		switch n := n.(type) {
		case *ast.GoStmt:
			if s.room() != "internal/sparse" { // whose two workers give the bits of one
				wrong = append(wrong, "starts a goroutine")
			}
		case *ast.SelectorExpr:
			of, ok := n.X.(*ast.Ident)
			if !ok {
				return true
			}
			switch name := n.Sel.Name; {
			case names[of.Name] == "time" && slices.Contains(clock, name):
				wrong = append(wrong, "uses time."+name+": time is handed in")
			case names[of.Name] == "math/rand/v2" && !slices.Contains(seeded, name):
				wrong = append(wrong, "uses rand."+name+": the source is seeded and handed in")
			}
		}
		return true
	})
	return wrong
}

func sorted(names map[string]string) []string {
	var all []string
	for _, p := range names {
		all = append(all, p)
	}
	slices.Sort(all)
	return all
}

// sources reads the module: all its Go files but those of modules within it.
func sources(t *testing.T) []source {
	t.Helper()
	root := filepath.Join("..", "..")
	var all []source
	err := filepath.WalkDir(root, func(p string, d fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		name, err := filepath.Rel(root, p)
		if err != nil {
			return err
		}
		if d.IsDir() {
			_, nested := os.Stat(filepath.Join(p, "go.mod"))
			if name != "." && (strings.HasPrefix(d.Name(), ".") || d.Name() == "testdata" || nested == nil) {
				return fs.SkipDir
			}
			return nil
		}
		if !strings.HasSuffix(name, ".go") {
			return nil
		}
		f, err := parser.ParseFile(token.NewFileSet(), p, nil, parser.ParseComments)
		if err != nil {
			return err
		}
		all = append(all, source{filepath.ToSlash(name), f})
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if len(all) < 50 {
		t.Fatalf("only %d files found", len(all))
	}
	return all
}

// Every import points downwards. Tests may import more: a scenario judges a core.
func TestImportsPointDown(t *testing.T) {
	for _, s := range sources(t) {
		if s.test() {
			continue
		}
		for _, w := range s.arrows() {
			t.Errorf("%s %s", s.name, w)
		}
	}
}

func TestCoresArePure(t *testing.T) {
	seen := map[string]bool{}
	for _, s := range sources(t) {
		if s.test() || !slices.Contains(pure, s.room()) {
			continue
		}
		seen[s.room()] = true
		for _, w := range s.impurities() {
			t.Errorf("%s %s", s.name, w)
		}
	}
	for _, p := range pure {
		if !seen[p] {
			t.Errorf("no code in %s", p)
		}
	}
}

// Every package has one comment, in one file, that begins with its name.
func TestPackageComments(t *testing.T) {
	comments, names := map[string][]string{}, map[string]string{}
	for _, s := range sources(t) {
		if s.test() && s.room() != "internal/house" {
			if s.file.Doc != nil {
				t.Errorf("%s: a package comment in a test", s.name)
			}
			continue
		}
		names[s.room()] = s.file.Name.Name
		if s.file.Doc == nil {
			if _, ok := comments[s.room()]; !ok {
				comments[s.room()] = nil
			}
			continue
		}
		comments[s.room()] = append(comments[s.room()], s.name)
		begin := "Package " + s.file.Name.Name + " "
		if s.file.Name.Name == "main" {
			begin = "Command " + path.Base(s.room()) + " "
		}
		if !strings.HasPrefix(s.file.Doc.Text(), begin) {
			t.Errorf("%s: the package comment does not begin with %q", s.name, begin)
		}
	}
	for room, files := range comments {
		if len(files) != 1 {
			t.Errorf("%s has %d package comments, expected one: %v", room, len(files), files)
		}
		if base := path.Base(room); names[room] != base && names[room] != "main" {
			t.Errorf("%s: package %s", room, names[room])
		}
	}
}

// The house has no other rooms at the top.
func TestTopLevel(t *testing.T) {
	entries, err := os.ReadDir(filepath.Join("..", ".."))
	if err != nil {
		t.Fatal(err)
	}
	rooms := []string{"agent", "cmd", "coordinator", "internal", "msgs", "partition", "scenarios"}
	for _, e := range entries {
		if e.IsDir() && !strings.HasPrefix(e.Name(), ".") && !slices.Contains(rooms, e.Name()) {
			if inside, err := filepath.Glob(filepath.Join("..", "..", e.Name(), "*.go")); err != nil || len(inside) > 0 {
				t.Errorf("%s: code outside the rooms %v", e.Name(), rooms)
			}
		}
	}
}

// The rules themselves find what they are for.
func TestRulesFindTheirCases(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"agent/a.go", `import "selvage/coordinator"`, "imports coordinator, which does not lie below it"},
		{"agent/a.go", `import "selvage/internal/bus"`, "imports internal/bus, which does not lie below it"},
		{"agent/a.go", `import "selvage/partition"`, ""},
		{"msgs/a.go", `import "selvage/internal/lie"`, "imports internal/lie, which does not lie below it"},
		{"internal/survey/a.go", `import "selvage/internal/lie"`, "imports internal/lie, which does not lie below it"},
		{"internal/new/a.go", ``, "the house has no room internal/new"},
		{"agent/a.go", `import "os/signal"`, "imports os/signal: it reaches the disk and the process; a shell does that"},
		{"agent/a.go", `import "net"`, "imports net: it reaches the network; a shell does that"},
		{"agent/a.go", `import "log/slog"`, "imports log/slog: events are returned as effects; the shell logs them"},
		{"agent/a.go", `import "math/rand"`, "imports math/rand: random numbers come from a seeded source of math/rand/v2 that is handed in"},
		{"agent/a.go", `import "github.com/nats-io/nats.go"`, "imports github.com/nats-io/nats.go: not one of the modules that only compute"},
		{"agent/a.go", `import "golang.org/x/sys/unix"`, "imports golang.org/x/sys/unix: not one of the modules that only compute"},
		{"agent/a.go", `import "gonum.org/v1/gonum/mat"`, ""},
		{"agent/a.go", `import . "time"`, "imports time without a name"},
		{"agent/a.go", "import \"time\"\nvar x = time.Now()", "uses time.Now: time is handed in"},
		{"agent/a.go", "import clock \"time\"\nvar x = clock.After", "uses time.After: time is handed in"},
		{"agent/a.go", "import \"time\"\nconst x = time.Second", ""},
		{"agent/a.go", "import \"math/rand/v2\"\nvar x = rand.IntN(3)", "uses rand.IntN: the source is seeded and handed in"},
		{"agent/a.go", "import \"math/rand/v2\"\nvar x = rand.New(rand.NewPCG(1, 2)).IntN(3)", ""},
		{"agent/a.go", "func f() { go f() }", "starts a goroutine"},
		{"internal/sparse/a.go", "func f() { go f() }", ""},
	} {
		f, err := parser.ParseFile(token.NewFileSet(), c.name, "package p\n"+c.text, 0)
		if err != nil {
			t.Fatal(err)
		}
		s := source{c.name, f}
		if got := strings.Join(append(s.arrows(), s.impurities()...), "; "); got != c.want {
			t.Errorf("%s: %q, want %q\n%s", c.name, got, c.want, c.text)
		}
	}
}
