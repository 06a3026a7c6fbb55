package main

import (
	"bytes"
	"errors"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

// program is the built binary; bin its folder.
var program, bin string

func TestMain(m *testing.M) {
	os.Exit(func() int {
		dir, err := os.MkdirTemp("", "selvage-test-")
		if err != nil {
			panic(err)
		}
		defer os.RemoveAll(dir)
		if err := os.Chmod(dir, 0o755); err != nil {
			panic(err)
		}
		bin, program = dir, filepath.Join(dir, "selvage")
		if out, err := exec.Command("go", "build", "-o", program, ".").CombinedOutput(); err != nil {
			fmt.Fprintf(os.Stderr, "go build: %v\n%s", err, out)
			return 1
		}
		return m.Run()
	}())
}

// answer is what the program said.
type answer struct {
	code        int
	stdout, err string
}

// selvage runs the program in dir.
func selvage(t *testing.T, dir string, args ...string) answer {
	t.Helper()
	return finish(t, prepare(dir, args...))
}

func prepare(dir string, args ...string) *exec.Cmd {
	cmd := exec.Command(program, args...)
	cmd.Dir = dir
	return cmd
}

func finish(t *testing.T, cmd *exec.Cmd) answer {
	t.Helper()
	var out, err bytes.Buffer
	if cmd.Stdout == nil {
		cmd.Stdout = &out
	}
	cmd.Stderr = &err
	failure := cmd.Run()
	var exit *exec.ExitError
	if failure != nil && !errors.As(failure, &exit) {
		t.Fatal(failure)
	}
	return answer{cmd.ProcessState.ExitCode(), out.String(), err.String()}
}

// unprivileged makes the program obey file permissions where the tests themselves run as root.
func unprivileged(cmd *exec.Cmd) *exec.Cmd {
	if os.Geteuid() == 0 {
		cmd.SysProcAttr = &syscall.SysProcAttr{Credential: &syscall.Credential{Uid: 65534, Gid: 65534}}
	}
	return cmd
}

// want fails unless the program ended with the code and said what is expected on standard error.
func (a answer) want(t *testing.T, code int, says ...string) {
	t.Helper()
	if a.code != code {
		t.Errorf("exit code %d, want %d; it said:\n%s%s", a.code, code, a.stdout, a.err)
	}
	for _, s := range says {
		if !strings.Contains(a.err, s) {
			t.Errorf("standard error lacks %q:\n%s", s, a.err)
		}
	}
	if strings.Contains(a.err, "goroutine ") || strings.Contains(a.err, "panic:") {
		t.Errorf("it panicked:\n%s", a.err)
	}
}

// write makes a file below dir.
func write(t *testing.T, dir, name, text string) {
	t.Helper()
	path := filepath.Join(dir, name)
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
}

func read(t *testing.T, parts ...string) string {
	t.Helper()
	b, err := os.ReadFile(filepath.Join(parts...))
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

// names lists what is in a folder, hidden files too.
func names(t *testing.T, dir string) string {
	t.Helper()
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	var all []string
	for _, e := range entries {
		all = append(all, e.Name())
	}
	return strings.Join(all, " ")
}

// shared is the folder with the published sets, which is not part of the project.
func shared(t *testing.T) string {
	dir := os.Getenv("SELVAGE_SHARED")
	if dir == "" {
		dir = filepath.Join("..", "..", "..", "shared")
	}
	dir, err := filepath.Abs(dir)
	if err == nil {
		_, err = os.Stat(dir)
	}
	if err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatalf("published sets: %v", err)
		}
		t.Skipf("published sets not here: %v", err)
	}
	return dir
}
