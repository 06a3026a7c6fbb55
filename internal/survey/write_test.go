package survey

import (
	"errors"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// onlyEntry fails unless dir holds nothing but name: nothing temporary is left.
func onlyEntry(t *testing.T, dir, name string) {
	t.Helper()
	entries, err := os.ReadDir(dir)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		if e.Name() != name {
			t.Errorf("%s was left behind", e.Name())
		}
	}
}

func TestWriteReplacesASurvey(t *testing.T) {
	parent := t.TempDir()
	dir := filepath.Join(parent, "s")
	if err := os.Mkdir(dir, 0o755); err != nil { // an empty folder is fine
		t.Fatal(err)
	}
	if err := Write(dir, spaceSurvey()); err != nil {
		t.Fatal(err)
	}
	if err := WriteResults(dir, nil, nil, nil, "epoch 1"); err != nil {
		t.Fatal(err)
	}
	if err := Write(dir, planarSurvey()); err != nil {
		t.Fatal(err)
	}
	sameFiles(t, dir, filepath.Join("testdata", "planar.good"))
	onlyEntry(t, parent, "s")
}

func TestWriteFollowsALink(t *testing.T) {
	parent := t.TempDir()
	target, link := filepath.Join(parent, "target"), filepath.Join(parent, "link")
	if err := Write(target, spaceSurvey()); err != nil {
		t.Fatal(err)
	}
	if err := os.Symlink(target, link); err != nil {
		t.Skip(err)
	}
	if err := Write(link, planarSurvey()); err != nil {
		t.Fatal(err)
	}
	sameFiles(t, target, filepath.Join("testdata", "planar.good"))
}

func TestWriteRefusesToLoseThings(t *testing.T) {
	for name, put := range map[string]string{
		"rulings.csv":                  "holds rulings.csv with what a person has decided, which would be lost",
		"photo.jpg":                    "holds photo.jpg, which would be lost",
		"robots/s-2/scans.bin":         "holds robots/s-2/scans.bin, which would be lost",
		"robots/other/keyframes.csv~":  "holds robots/other/keyframes.csv~, which would be lost",
		"../elsewhere/of/another/file": "is not empty and holds no survey.yaml",
	} {
		t.Run(name, func(t *testing.T) {
			dir := copyOf(t, "space.good")
			path := filepath.Join(dir, name)
			if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(path, nil, 0o644); err != nil {
				t.Fatal(err)
			}
			if strings.HasPrefix(name, "..") {
				dir = filepath.Join(dir, "..", "elsewhere")
			}
			before := tree(t, dir)
			err := Write(dir, planarSurvey())
			if err == nil || !strings.Contains(err.Error(), put) {
				t.Errorf("got %v, want %s", err, put)
			}
			if diff := cmp.Diff(before, tree(t, dir)); diff != "" {
				t.Errorf("the folder has changed (-before +after):\n%s", diff)
			}
		})
	}
}

// A survey that could not be read again is not written.
func TestWriteRefusesABadSurvey(t *testing.T) {
	for name, c := range map[string]struct {
		change func(*Survey)
		want   string
	}{
		"robot that climbs": {func(s *Survey) { s.Meta.Robots[0].ID, s.Robots[0].ID = "../x", "../x" },
			`survey.yaml: key robots[0].id: found "../x", expected 1 to 32 letters`},
		"robots in another order": {func(s *Survey) { s.Robots[0], s.Robots[1] = s.Robots[1], s.Robots[0] },
			`survey.yaml: key robots[0].id: found "carrier_1" listed, "s-2" with data, expected the same robots in the same order`},
		"robot missing": {func(s *Survey) { s.Robots = s.Robots[:1] },
			`survey.yaml: key robots: found 2 robots listed, 1 with data, expected the same`},
		"NaN": {func(s *Survey) { s.Robots[0].Keyframes[1].Pose.T[0] = math.NaN() },
			`robots/carrier_1/keyframes.csv:3: column x_m: found "NaN", expected a finite`},
		"kind": {func(s *Survey) { s.Robots[0].Relatives[0].Kind = 7 },
			`robots/carrier_1/relative.csv:2: column kind: found "unknown", expected odometry or closure`},
		"zero covariance": {func(s *Survey) { s.Ties[1].Cov = Cov{} },
			`ties.csv:3: column sx_m: found "0", expected a number from`},
		"source of two lines": {func(s *Survey) { s.Ties[1].Source = "a\nb" },
			`ties.csv:3: found `},
		"NaN in the grid": {func(s *Survey) { s.Meta.Datum.Grid.X = math.NaN() },
			`survey.yaml: key datum.grid.x_m: found NaN, expected a number`},
	} {
		t.Run(name, func(t *testing.T) {
			s := spaceSurvey()
			c.change(s)
			parent := t.TempDir()
			dir := filepath.Join(parent, "out")
			err := Write(dir, s)
			var v *Violations
			if !errors.As(err, &v) || !strings.HasPrefix(err.Error(), c.want) {
				t.Errorf("got %v, want %s", err, c.want)
			}
			if _, err := os.Stat(dir); !errors.Is(err, fs.ErrNotExist) {
				t.Errorf("something was written: %v", err)
			}
			onlyEntry(t, parent, "")
		})
	}
}

func TestLargeTablesAreGzippedAlike(t *testing.T) {
	s := planarSurvey()
	k := s.Robots[0].Keyframes[1]
	for id := int64(100); id < 120000; id++ {
		k.ID, k.Pose.T[0] = id, float64(id)/7
		s.Robots[0].Keyframes = append(s.Robots[0].Keyframes, k)
	}
	parent := t.TempDir()
	one, two := filepath.Join(parent, "one"), filepath.Join(parent, "two")
	for _, dir := range []string{one, two} {
		if err := Write(dir, s); err != nil {
			t.Fatal(err)
		}
	}
	files := tree(t, one)
	if _, ok := files["robots/r1/keyframes.csv.gz"]; !ok || len(files) != 4 {
		t.Errorf("no keyframes.csv.gz, or not 4 files")
	}
	if diff := cmp.Diff(files, tree(t, two)); diff != "" {
		t.Errorf("two writes differ")
	}
	got, err := Read(two)
	if err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(s, got) {
		t.Errorf("the survey has changed")
	}
}

// Any printable text in survey.yaml and any float64 in a table comes back.
func TestTextsAndNumbersComeBack(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "s")
	line := rapid.StringOfN(rapid.Rune(), 1, 30, maxText).Filter(validText).Filter(func(s string) bool { return s != "" })
	lines := rapid.StringOfN(rapid.OneOf(rapid.Rune(), rapid.SampledFrom([]rune(" \n\t#-:|'\""))), 0, 60, -1).
		Filter(func(s string) bool { return printable(s, true) })
	odd := rapid.SampledFrom([]string{".inf", ".NaN", "~", "null", "yes", "1", "1e5", "0x1F", "- a", "a: b", "# c", "*a", "&a", "!t", "---", "'", `"`, "{", "[", "%", "@", "`", "|", ">", "?", "<<"})
	rapid.Check(t, func(t *rapid.T) {
		s := spaceSurvey()
		s.Meta.Name = rapid.OneOf(line, odd).Draw(t, "name")
		s.Meta.Datum.Grid.Name = rapid.OneOf(line, odd).Draw(t, "grid")
		s.Meta.Datum.Grid.X = rapid.Float64Range(-maxMetres, maxMetres).Draw(t, "x")
		s.Meta.Notes = rapid.OneOf(lines, odd).Draw(t, "notes")
		s.Ties[0].Source = line.Draw(t, "source")
		for i := range 3 {
			s.Ties[0].Pose.T[i] = rapid.Float64Range(-maxMetres, maxMetres).Draw(t, "t")
			s.Ties[0].Cov.Sigma[i] = rapid.Float64Range(minSigma, maxSigma).Draw(t, "sigma")
		}
		if err := Write(dir, s); err != nil {
			t.Fatal(err)
		}
		got, err := Read(dir)
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(s, got); diff != "" {
			t.Fatalf("(-want +got):\n%s", diff)
		}
	})
}
