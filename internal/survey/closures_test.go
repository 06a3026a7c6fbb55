package survey

import (
	"errors"
	"math"
	"os"
	"path/filepath"
	"testing"

	"github.com/google/go-cmp/cmp"
)

// twice is a survey with two closures between the same keyframes and one elsewhere.
func twice() *Survey {
	return &Survey{Robots: []Robot{{ID: "a", Relatives: []Relative{
		{Session: 1, From: 0, To: 1, Kind: Odometry},
		{Session: 1, From: 0, To: 9, Kind: Closure},
		{Session: 1, From: 0, To: 9, Kind: Closure},
		{Session: 2, From: 3, To: 7, Kind: Closure},
	}}}}
}

func TestClosuresLeftOut(t *testing.T) {
	dir := t.TempDir()
	s := twice()
	if n, err := LeaveOutClosures(dir, s); n != 0 || err != nil || len(s.Robots[0].Relatives) != 4 {
		t.Errorf("without results: %d, %v", n, err)
	}
	all := []ResultClosure{
		{Robot: "a", Session: 1, From: 0, To: 9, Verdict: "held", Reason: "agrees, \"well\"", ChiSquare: 2.5, DoF: 6, Threshold: 16.8},
		{Robot: "a", Session: 1, From: 0, To: 9, Verdict: "refused", ChiSquare: 1e4, DoF: 6, Threshold: 22.5},
		{Robot: "a", Session: 2, From: 3, To: 7, Verdict: "open", ChiSquare: math.NaN()},
	}
	if err := WriteClosures(dir, all, "epoch 7"); err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile(filepath.Join(dir, "results", "closures.csv"))
	if err != nil {
		t.Fatal(err)
	}
	const want = `# epoch 7
robot,session,from,to,verdict,reason,chi_square,dof,threshold
a,1,0,9,held,"agrees, ""well""",2.5,6,16.8
a,1,0,9,refused,,10000,6,22.5
a,2,3,7,open,,,,
`
	if d := cmp.Diff(want, string(text)); d != "" {
		t.Error(d)
	}
	n, err := LeaveOutClosures(dir, s)
	if n != 2 || err != nil || !cmp.Equal(s, &Survey{Robots: []Robot{{ID: "a", Relatives: twice().Robots[0].Relatives[:2]}}}) {
		t.Errorf("%d left out, %v: %+v", n, err, s)
	}
	all[0].Verdict = "maybe"
	if err := WriteClosures(dir, all, "epoch 8"); err == nil {
		t.Error("a verdict that is none was written")
	}
}

func TestBadClosures(t *testing.T) {
	const head = "robot,session,from,to,verdict,reason,chi_square,dof\n"
	for _, c := range []struct{ rows, want string }{
		{"a,1,0,1,held,,,\n", `results/closures.csv:2: column robot: found a loop closure of robot "a", session 1, from keyframe 0 to 1, expected one of this survey, each once`},
		{"a,2,3,7,held,,,\na,2,3,7,held,,,\n", `results/closures.csv:3: column robot: found a loop closure of robot "a", session 2, from keyframe 3 to 7, expected one of this survey, each once`},
		{"a,2,3,7,maybe,,,\n", `results/closures.csv:2: column verdict: found "maybe", expected held, refused or open`},
		{"a,-2,3,7,held,,,\n", `results/closures.csv:2: column session: found "-2", expected an integer from 0 to 4294967295`},
		{"a,2,x,7,held,,,\n", `results/closures.csv:2: column from: found "x", expected an integer of 64 bits`},
	} {
		dir := t.TempDir()
		if err := os.Mkdir(filepath.Join(dir, resultsName), 0o755); err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(filepath.Join(dir, resultsName, "closures.csv"), []byte(head+c.rows), 0o644); err != nil {
			t.Fatal(err)
		}
		s := twice()
		n, err := LeaveOutClosures(dir, s)
		var bad *Violations
		if !errors.As(err, &bad) || err.Error() != c.want || n != 0 || !cmp.Equal(s, twice()) {
			t.Errorf("%q: %v, want %s", c.rows, err, c.want)
		}
	}
}
