package main

import (
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
)

func TestEnrol(t *testing.T) {
	dir := t.TempDir()
	secret := regexp.MustCompile(`SU[A-Z2-7]{20}|PRIVATE`)
	run := func(code int, says string, args ...string) {
		t.Helper()
		a := selvage(t, dir, append([]string{"enrol"}, args...)...)
		if code == 0 {
			a.want(t, 0)
			if !strings.Contains(a.stdout, says) {
				t.Errorf("%v: said %q, want %q", args, a.stdout, says)
			}
		} else {
			a.want(t, code, says)
		}
		if secret.MatchString(a.stdout + a.err) {
			t.Errorf("%v: tells a secret", args)
		}
	}
	run(0, "The base and r1, r2 and r3 of fleet f are enrolled in f-keys; the certificate of the base is good until", "f", "--robots", "r1,r2,r3", "--host", "base.site,10.0.0.2")
	if got := names(t, filepath.Join(dir, "f-keys", "robots", "r2")); got != "README agent.yaml ca.crt robot.seed selvage-agent.service" {
		t.Errorf("folder of r2: %s", got)
	}
	if text := read(t, dir, "f-keys", "base", "base.seed"); !secret.MatchString(text) {
		t.Error("a seed does not look as the test thinks")
	}
	run(exitInput, "f-keys: is there already", "f", "--robots", "r1", "--host", "base.site")
	run(0, "Enrolled r7 in fleet f.", "f", "--add", "r7")
	run(0, "Revoked r2 of fleet f: what the base stores from 20", "f", "--revoke", "r2")
	run(exitInput, `robot "r1": the name is taken`, "f", "--add", "r1")
	run(exitInput, `robot "r2": expected one that is enrolled`, "f", "--revoke", "r2")
	run(exitInput, "is of fleet f, not of g", "g", "--add", "r1", "-o", "f-keys")
	run(exitInput, "no such file", "g", "--add", "r1")
	run(exitInput, "--host is of a new fleet", "f", "--add", "r9", "--host", "base")
	run(exitInput, "no host was given", "g", "--robots", "r1")
	run(exitInput, `validity of 0 days`, "g", "--robots", "r1", "--host", "base", "--days", "0")
	run(exitInput, "robots", "g")
	if got := names(t, dir); got != "f-keys" {
		t.Errorf("left %s", got)
	}

	// A folder that cannot be written to is the environment's fault.
	closed := filepath.Join(dir, "closed")
	for _, step := range []error{os.Mkdir(closed, 0o755), os.Chmod(dir, 0o755), os.Chmod(filepath.Dir(dir), 0o755)} {
		if step != nil {
			t.Fatal(step)
		}
	}
	finish(t, unprivileged(prepare(closed, "enrol", "f", "--robots", "r1", "--host", "base"))).want(t, exitEnvironment, "permission denied")
}
