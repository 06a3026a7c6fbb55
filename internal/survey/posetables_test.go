package survey

import (
	"errors"
	"os"
	"path/filepath"
	"testing"

	"github.com/google/go-cmp/cmp"
)

const (
	goodKeyframes = "id,x,y,z,qx,qy,qz,qw\n3,0,0,0,0,0,0,1\n4,1,0,0,0,0,0.6,0.8\n"
	relativeHead  = "from,to,x,y,z,qx,qy,qz,qw,i00,i01,i02,i03,i04,i05,i11,i12,i13,i14,i15,i22,i23,i24,i25,i33,i34,i35,i44,i45,i55\n"
	goodRelative  = relativeHead +
		"3,4,1,0,0,0,0,0.6,0.8,4,0,0,0,0,0,16,0,0,0,0,0,0,0,0,0,0,0,0,0,100\n" +
		"4,3,1,0,0,0,0,0.6,0.8,4,0,0,0,0,1,4,0,0,0,0,0,0,0,0,0,0,0,0,0,1\n"
)

func poseTables(t *testing.T, keyframes, relative string) string {
	t.Helper()
	dir := t.TempDir()
	for name, text := range map[string]string{"keyframes.csv": keyframes, "relative.csv": relative} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	return dir
}

func TestReadPoseTables(t *testing.T) {
	got, err := ReadPoseTables(poseTables(t, goodKeyframes, goodRelative))
	if err != nil {
		t.Fatal(err)
	}
	turned := Pose{T: [3]float64{1, 0, 0}, Q: [4]float64{0, 0, 0.6, 0.8}}
	want := []Relative{
		{Session: 1, From: 3, To: 4, Kind: Odometry, Pose: turned, Cov: Cov{Sigma: [6]float64{0.5, 0.25, inf, inf, inf, 0.1}}},
		{Session: 1, From: 4, To: 3, Kind: Closure, Pose: turned, Cov: got.Robots[0].Relatives[1].Cov},
	}
	if diff := cmp.Diff(want, got.Robots[0].Relatives); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	if got.Meta.Dimension != 2 || got.Robots[0].ID != "r1" || len(got.Robots[0].Keyframes) != 2 {
		t.Errorf("dimension %d, robot %s, %d keyframes", got.Meta.Dimension, got.Robots[0].ID, len(got.Robots[0].Keyframes))
	}
}

// One entry out of the plane, in a pose or in an information matrix, makes the
// whole graph one in space.
func TestPoseTablesInSpace(t *testing.T) {
	for _, tables := range [][2]string{
		{"id,x,y,z,qx,qy,qz,qw\n3,0,0,0,0,0,0,1\n4,1,0,0.5,0,0,0,1\n", goodRelative},
		{goodKeyframes, goodRelative + "3,4,1,0,0,0.6,0,0,0.8,4,0,0,0,0,0,16,0,0,0,0,0,0,0,0,0,0,0,0,0,100\n"},
		{goodKeyframes, goodRelative + "3,4,1,0,0,0,0,0.6,0.8,4,0,0,0,0,0,16,0,0,0,0,1,0,0,0,0,0,0,0,0,100\n"},
	} {
		got, err := ReadPoseTables(poseTables(t, tables[0], tables[1]))
		if err != nil {
			t.Fatal(err)
		}
		if got.Meta.Dimension != 3 {
			t.Errorf("dimension %d, want 3", got.Meta.Dimension)
		}
	}
}

func TestBadPoseTables(t *testing.T) {
	row := func(info string) string { return relativeHead + "3,4,1,0,0,0,0,0.6,0.8," + info + "\n" }
	for name, c := range map[string]struct{ keyframes, relative, want string }{
		"indefinite": {goodKeyframes, row("1,2,0,0,0,0,1,0,0,0,0,1,0,0,0,1,0,0,1,0,1"),
			"relative.csv:2: column i00..i55: found an indefinite information matrix (smallest eigenvalue -1, largest 3), expected positive semidefinite: smallest at least -1e-09 of the largest"},
		"singular": {goodKeyframes, row("1,1,0,0,0,0,1,0,0,0,0,1,0,0,0,1,0,0,1,0,1"),
			"relative.csv:2: column i00..i55: found an information matrix that cannot be written as sigmas: singular (smallest eigenvalue 0, largest 2), expected one that is positive definite on the components that were measured, with rows of zeros for the others"},
		"negative": {goodKeyframes, row("1,0,0,0,0,0,-1,0,0,0,0,1,0,0,0,1,0,0,1,0,1"),
			"relative.csv:2: column i00..i55: found an indefinite information matrix (smallest eigenvalue -1, largest 1), expected positive semidefinite: smallest at least -1e-09 of the largest"},
		"next to nothing": {goodKeyframes, row("1e-300,0,0,0,0,0,1,0,0,0,0,1,0,0,0,1,0,0,1,0,1"),
			"relative.csv:2: column i00..i55: found an information matrix that cannot be written as sigmas: sigma of x is 1e+150, not from 1e-12 to 1e+12, expected one that is positive definite on the components that were measured, with rows of zeros for the others"},
		"not a number": {goodKeyframes, row("1,0,0,0,0,0,1,0,0,nan,0,1,0,0,0,1,0,0,1,0,1"),
			`relative.csv:2: column i14: found "nan", expected a finite decimal number`},
		"unknown keyframe": {goodKeyframes, relativeHead + "3,5,1,0,0,0,0,0.6,0.8,1,0,0,0,0,0,1,0,0,0,0,1,0,0,0,1,0,0,1,0,1\n",
			"relative.csv:2: column to: found 5, expected a keyframe of robot r1, session 1"},
		"to itself": {goodKeyframes, relativeHead + "3,3,1,0,0,0,0,0.6,0.8,1,0,0,0,0,0,1,0,0,0,0,1,0,0,0,1,0,0,1,0,1\n",
			"relative.csv:2: column to: found 3, the same as in column from, expected another keyframe"},
		"id twice": {goodKeyframes + "3,0,0,0,0,0,0,1\n", goodRelative,
			"keyframes.csv:4: column id: found 3 a second time, expected each id once"},
		"not unit": {goodKeyframes + "5,0,0,0,0,0,0,2\n", goodRelative,
			"keyframes.csv:4: column qx..qw: found a quaternion of norm 2, expected 1 within 1e-06"},
	} {
		t.Run(name, func(t *testing.T) {
			s, err := ReadPoseTables(poseTables(t, c.keyframes, c.relative))
			var v *Violations
			if !errors.As(err, &v) || s != nil || err.Error() != c.want {
				t.Errorf("got\n%v\nwant\n%s", err, c.want)
			}
		})
	}
}
