package main

import (
	"os"
	"os/exec"
	"regexp"
	"slices"
	"strings"
	"testing"
)

// verbs reads the verbs off the help.
func verbs(t *testing.T) []string {
	t.Helper()
	a := selvage(t, t.TempDir(), "--help")
	a.want(t, 0)
	_, list, ok := strings.Cut(a.stdout, "Commands:\n")
	if !ok {
		t.Fatalf("no list of commands:\n%s", a.stdout)
	}
	var all []string
	for _, m := range regexp.MustCompile(`(?m)^  ([a-z]+) `).FindAllStringSubmatch(list, -1) {
		all = append(all, m[1])
	}
	return all
}

// Every verb's help ends its text with an example, which works as it stands: convert makes what split cuts, and split what adjust
// adjusts.
func TestExamplesWork(t *testing.T) {
	dir := t.TempDir()
	all := verbs(t)
	first := []string{"convert", "split", "adjust"}
	for _, v := range first {
		if !slices.Contains(all, v) {
			t.Fatalf("verb %s is not in the help: %v", v, all)
		}
	}
	for _, v := range all {
		if !slices.Contains(first, v) {
			first = append(first, v)
		}
	}
	for _, verb := range first {
		t.Run(verb, func(t *testing.T) {
			a := selvage(t, dir, verb, "--help")
			a.want(t, 0)
			example := exampleOf(a.stdout)
			if !strings.Contains(example, "selvage "+verb) {
				t.Fatalf("no example of %s in its help:\n%s", verb, a.stdout)
			}
			if verb == "rehearse" && testing.Short() {
				t.Skip("a rehearsal takes its time")
			}
			cmd := exec.Command("bash", "-euc", example)
			cmd.Dir = dir
			cmd.Env = append(os.Environ(), "PATH="+bin+":"+os.Getenv("PATH"))
			if out, err := cmd.CombinedOutput(); err != nil {
				t.Fatalf("%v:\n%s\nof\n%s", err, out, example)
			}
		})
	}
}

// exampleOf returns the indented lines that follow the last line of text that begins with Example.
func exampleOf(help string) string {
	at := strings.LastIndex(help, "\nExample")
	if at < 0 {
		return ""
	}
	var lines []string
	for _, l := range strings.Split(help[at+1:], "\n")[1:] {
		switch {
		case strings.HasPrefix(l, "    "):
			lines = append(lines, strings.TrimPrefix(l, "    "))
		case len(lines) > 0 && l != "":
			return strings.Join(lines, "\n")
		}
	}
	return strings.Join(lines, "\n")
}

func TestNoArgumentsShowHelp(t *testing.T) {
	a := selvage(t, t.TempDir())
	a.want(t, exitInput, "Usage: selvage", "Commands:")
	if a.stdout != "" {
		t.Errorf("on standard output: %q", a.stdout)
	}
}

func TestVersion(t *testing.T) {
	a, b := selvage(t, t.TempDir(), "version"), selvage(t, t.TempDir(), "--version")
	a.want(t, 0)
	b.want(t, 0)
	if a.stdout != b.stdout || !regexp.MustCompile(`^selvage .+ \(go1\.\S+, \w+/\w+\)\n$`).MatchString(a.stdout) {
		t.Errorf("version %q, --version %q", a.stdout, b.stdout)
	}
}
