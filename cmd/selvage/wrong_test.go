package main

import (
	"bufio"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
)

const tableHead = "from,to,x,y,z,qx,qy,qz,qw,i00,i01,i02,i03,i04,i05,i11,i12,i13,i14,i15,i22,i23,i24,i25,i33,i34,i35,i44,i45,i55\n"

// tables writes pose tables of n poses at rest and the given pairs.
func tables(t *testing.T, dir, name string, n int, pairs [][2]int) {
	t.Helper()
	var k, r strings.Builder
	k.WriteString("id,x,y,z,qx,qy,qz,qw\n")
	for i := range n {
		fmt.Fprintf(&k, "%d,0,0,0,0,0,0,1\n", i)
	}
	r.WriteString(tableHead)
	for _, p := range pairs {
		fmt.Fprintf(&r, "%d,%d,0,0,0,0,0,0,1,1,0,0,0,0,0,1,0,0,0,0,0,0,0,0,0,0,0,0,0,1\n", p[0], p[1])
	}
	write(t, dir, name+"/keyframes.csv", k.String())
	write(t, dir, name+"/relative.csv", r.String())
}

// survey converts pose tables into the survey name.
func surveyOf(t *testing.T, dir, name string, n int, pairs [][2]int) {
	t.Helper()
	tables(t, dir, name+"-tables", n, pairs)
	selvage(t, dir, "convert", "--from", "pose-tables", name+"-tables", "-o", name).want(t, 0)
}

func chain(n int) (pairs [][2]int) {
	for i := 1; i < n; i++ {
		pairs = append(pairs, [2]int{i - 1, i})
	}
	return pairs
}

// Everything that a person can get wrong ends with code 2 and a line that says what is wrong where; nothing is left behind.
func TestWrongInput(t *testing.T) {
	dir := t.TempDir()
	surveyOf(t, dir, "chain", 6, chain(6))
	surveyOf(t, dir, "star", 9, [][2]int{{0, 1}, {0, 2}, {0, 3}, {0, 4}, {0, 5}, {0, 6}, {0, 7}, {0, 8}})
	surveyOf(t, dir, "parts", 4, [][2]int{{0, 1}, {2, 3}})
	selvage(t, dir, "split", "chain", "-n", "2", "-o", "two").want(t, 0)
	write(t, dir, "letters/love.txt", "not a survey\n")
	write(t, dir, "file", "text\n")
	tables(t, dir, "bad", 3, chain(3))
	write(t, dir, "bad/relative.csv", strings.Replace(read(t, dir, "bad/relative.csv"), "1,2,0", "1,7,0", 1))
	write(t, dir, "indefinite/keyframes.csv", read(t, dir, "bad/keyframes.csv"))
	write(t, dir, "indefinite/relative.csv", tableHead+strings.Repeat("0,1,0,0,0,0,0,0,1,1,2,0,0,0,0,1,0,0,0,0,1,0,0,0,1,0,0,1,0,1\n", 30))
	write(t, dir, "empty/keyframes.csv", "id,x,y,z,qx,qy,qz,qw\n")
	write(t, dir, "empty/relative.csv", tableHead)
	selvage(t, dir, "convert", "--from", "pose-tables", "empty", "-o", "nothing").want(t, 0)
	write(t, dir, "theirs/results/poses.csv", "time,price\n1,2\n")
	before := names(t, dir)
	for _, c := range []struct {
		args string
		says string
	}{
		{"--bogus", "unknown flag --bogus"},
		{"frobnicate", "unexpected argument frobnicate"},
		{"adjust", "<survey>"},
		{"adjust chain other", "unexpected argument other"},
		{"adjust chain --log-level loud", "--log-level"},
		{"adjust missing", "missing: no such file"},
		{"adjust file", "file is a file, expected a survey folder"},
		{"adjust letters", "survey.yaml: found no such file"},
		{"adjust chain --start middle", "--start must be one of"},
		{"adjust chain --workers 3", "--workers 3: expected 1 or 2"},
		{"adjust chain --workers two", "--workers"},
		{"adjust chain --tolerance 0", "--tolerance 0: expected a number above 0"},
		{"adjust chain --tolerance nan", "--tolerance NaN: expected a number above 0"},
		{"adjust chain --max-iterations 0", "--max-iterations 0: expected 1 or more"},
		{"adjust chain -o letters", "letters is not empty and holds neither a survey nor results"},
		{"adjust chain -o theirs", "results/poses.csv:1: column robot: found no such column"},
		{"adjust chain -o file", "file: not a directory"},
		{"adjust chain -o file/in/it", "file/in/it: not a directory"},
		{"adjust nothing", "holds no keyframes"},
		{"split chain -n 2", "missing flags: --out=FOLDER"},
		{"split chain -o x", "missing flags: --pieces=K"},
		{"split chain -n 1 -o x", "-n 1: expected 2 pieces or more"},
		{"split chain -n -4 -o x", "--pieces"},
		{"split chain -n 7 -o x", "7 pieces of 6 vertices asked for, 1 to 6 expected"},
		{"split star -n 3 -o x", "star cannot be cut into 3 connected pieces of near equal size"},
		{"split parts -n 2 -o x", "falls into 2 parts that nothing joins"},
		{"split two -n 2 -o x", "one robot without ties can be split"},
		{"split chain -n 2 --seed -1 -o x", "--seed"},
		{"split chain -n 2 -o letters", "letters is not empty and holds no survey.yaml"},
		{"split chain -n 2 -o file", "file is a file, expected a folder to write to"},
		{"split missing -n 2 -o x", "missing: no such file"},
		{"convert chain -o x", "missing flags: --from=FORMAT"},
		{"convert --from parchment chain -o x", "--from must be one of"},
		{"convert --from pose-tables missing -o x", "keyframes.csv: found no such file"},
		{"convert --from pose-tables file -o x", "keyframes.csv: not a directory"},
		{"convert --from pose-tables bad -o x", "relative.csv:3: column to: found 7, expected a keyframe"},
		{"convert --from pose-tables indefinite -o x", "30 places are wrong, nothing was written\n  relative.csv:2: column i00..i55: found an indefinite information matrix"},
	} {
		t.Run(c.args, func(t *testing.T) {
			a := selvage(t, dir, strings.Fields(c.args)...)
			a.want(t, exitInput, c.says)
			if a.stdout != "" {
				t.Errorf("on standard output: %q", a.stdout)
			}
			if now := names(t, dir); now != before {
				t.Errorf("left behind: %s, was %s", now, before)
			}
		})
	}
	if got := read(t, dir, "theirs/results/poses.csv") + names(t, filepath.Join(dir, "letters")); got != "time,price\n1,2\nlove.txt" {
		t.Errorf("a folder that is not ours was touched: %q", got)
	}
}

// What the file system refuses ends with code 3.
func TestEnvironment(t *testing.T) {
	dir := t.TempDir()
	surveyOf(t, dir, "chain", 6, chain(6))
	surveyOf(t, dir, "locked", 6, chain(6))
	for _, step := range []error{
		os.Chmod(filepath.Dir(dir), 0o755),
		os.Chmod(filepath.Join(dir, "locked/robots/r1/keyframes.csv"), 0),
		os.Mkdir(filepath.Join(dir, "open"), 0o777), os.Chmod(filepath.Join(dir, "open"), 0o777),
		os.Mkdir(filepath.Join(dir, "fixed"), 0o555),
	} {
		if step != nil {
			t.Fatal(step)
		}
	}
	for _, c := range []struct{ args, says string }{
		{"adjust locked -o open", "keyframes.csv: permission denied"},
		{"split locked -n 2 -o open", "keyframes.csv: permission denied"},
		{"adjust chain -o fixed", "results: permission denied"},
		{"adjust chain -o fixed/inner", "permission denied"},
		{"split chain -n 2 -o fixed/inner", "permission denied"},
		{"convert --from pose-tables chain-tables -o fixed/inner", "permission denied"},
	} {
		t.Run(c.args, func(t *testing.T) {
			finish(t, unprivileged(prepare(dir, strings.Fields(c.args)...))).want(t, exitEnvironment, c.says)
			if got := names(t, filepath.Join(dir, "fixed")) + names(t, filepath.Join(dir, "open")); got != "" {
				t.Errorf("left behind: %s", got)
			}
		})
	}
	full, err := os.OpenFile("/dev/full", os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer full.Close()
	for _, args := range []string{"adjust chain --json", "adjust chain", "version"} {
		cmd := prepare(dir, strings.Fields(args)...)
		cmd.Stdout = full
		finish(t, cmd).want(t, exitEnvironment, "no space left on device")
	}
}

// An interrupt in the middle of the work leaves nothing behind.
func TestInterrupt(t *testing.T) {
	dir := t.TempDir()
	const side = 150
	var pairs [][2]int
	for y := range side {
		for x := range side {
			if x > 0 {
				pairs = append(pairs, [2]int{y*side + x - 1, y*side + x})
			}
			if y > 0 {
				pairs = append(pairs, [2]int{y*side - side + x, y*side + x})
			}
		}
	}
	surveyOf(t, dir, "grid", side*side, pairs)
	before := names(t, dir)
	cmd := prepare(dir, "split", "grid", "-n", "24", "-o", "pieces")
	said, err := cmd.StderrPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	lines := bufio.NewScanner(said)
	for lines.Scan() && lines.Text() != "splitting" {
	}
	if err := cmd.Process.Signal(syscall.SIGINT); err != nil {
		t.Fatal(err)
	}
	last := ""
	for lines.Scan() {
		last = lines.Text()
	}
	_ = cmd.Wait() // the code is checked below
	if code := cmd.ProcessState.ExitCode(); code != exitInterrupted || last != "selvage: interrupted; nothing was written" {
		t.Errorf("exit code %d, said %q", code, last)
	}
	if now := names(t, dir); now != before {
		t.Errorf("left behind: %s, was %s", now, before)
	}
}
