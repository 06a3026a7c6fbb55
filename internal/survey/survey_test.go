package survey

import (
	"bytes"
	"compress/gzip"
	"errors"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

var inf = math.Inf(1)

// turned is a pose whose quaternion is unit only within some parts in 1e7, as
// front ends that count in float32 write them.
func turned(x float64) Pose {
	return Pose{T: [3]float64{x, 0.30000000000000004, -1e-17}, Q: [4]float64{0.5, -0.5, 0.5, 0.5000001}}
}

// spaceSurvey is the survey in testdata/space.good.
func spaceSurvey() *Survey {
	correlated := Cov{Sigma: [6]float64{0.05, 0.06, 0.07, 0.001, 0.002, 0.003}}
	correlated.Corr[1] = -0.25 // x_z
	correlated.Corr[14] = 0.9  // ry_rz
	noHeading := Cov{Sigma: [6]float64{0.1, 0.1, 0.2, 0.01, 0.01, inf}}
	return &Survey{
		Meta: Meta{
			Format: 1, Name: "north adit, level 3", Dimension: 3,
			Datum: Datum{Name: "adit", Level: true, Grid: &Grid{Name: "mine grid", X: 512345.678, Y: 4321000.5, Z: -120, YawRad: 0.1}},
			Robots: []RobotMeta{
				{ID: "carrier_1", Sessions: []uint32{1}, GravityAligned: true, Mounting: []Mount{
					{Name: "lidar", Kind: "sensor", X: 0.2, Z: 0.4, QW: 1},
					{Name: "prism", Kind: "target", Z: 0.75, QW: 1},
				}},
				{ID: "s-2", Sessions: []uint32{1, 7}},
			},
			Notes: "Water in the east drift.\nRestarted s-2 at the junction.\n",
		},
		Robots: []Robot{
			{ID: "carrier_1",
				Keyframes: []Keyframe{
					{Session: 1, ID: 0, StampNS: 1764590000000000001, HasStamp: true, Pose: Identity()},
					{Session: 1, ID: 1, StampNS: 1764590001000000000, HasStamp: true, Pose: turned(1.5)},
					{Session: 1, ID: 2, Pose: turned(3)},
				},
				Relatives: []Relative{
					{Session: 1, From: 0, To: 1, Pose: turned(1.5), Cov: Uncorrelated(0.02, 0.001)},
					{Session: 1, From: 1, To: 2, Pose: turned(1.5), Cov: correlated},
					{Session: 1, From: 2, To: 0, Kind: Closure, Pose: turned(-3), Cov: noHeading},
				}},
			{ID: "s-2",
				Keyframes: []Keyframe{
					{Session: 1, ID: 5, Pose: Identity()},
					{Session: 7, ID: 5, StampNS: -1, HasStamp: true, Pose: Identity()},
				}},
		},
		Ties: []Tie{
			{ID: "a.1", FromRobot: "carrier_1", FromSession: 1, FromKey: 2, ToRobot: "s-2", ToSession: 7, ToKey: 5,
				Pose: turned(1234567.125), Cov: correlated, Source: `place matcher "B", v2`, StampNS: 12, HasStamp: true},
			{ID: "a.2", FromRobot: "s-2", FromSession: 1, FromKey: 5, ToRobot: "carrier_1", ToSession: 1,
				ToStampNS: 1764590000500000000, ToByStamp: true, Pose: turned(-4), Cov: noHeading},
			{ID: "restart", FromRobot: "s-2", FromSession: 1, FromKey: 5, ToRobot: "s-2", ToSession: 7, ToKey: 5,
				Pose: Identity(), Cov: Uncorrelated(1, 0.5)},
		},
		Truth: []TruthPose{
			{Robot: "carrier_1", Session: 1, Key: 1, Pose: turned(1.25)},
			{Robot: "s-2", Session: 7, StampNS: 99, ByStamp: true, Pose: Identity()},
		},
	}
}

// planarSurvey is the survey in testdata/planar.good.
func planarSurvey() *Survey {
	pose := func(x, y float64) Pose { return Pose{T: [3]float64{x, y}, Q: [4]float64{2: 0.6, 3: 0.8}} }
	c := Cov{Sigma: [6]float64{0.05, 0.05, inf, inf, inf, 0.01}}
	c.Corr[4] = 0.5 // x_rz
	return &Survey{
		Meta: Meta{Format: 1, Name: "hall", Dimension: 2, Datum: Datum{Name: "hall"},
			Robots: []RobotMeta{{ID: "r1", Sessions: []uint32{0}}}},
		Robots: []Robot{{ID: "r1",
			Keyframes: []Keyframe{{ID: -3, Pose: Identity()}, {ID: 9, Pose: pose(1, 2)}},
			Relatives: []Relative{{From: -3, To: 9, Pose: pose(1, 2), Cov: c}}}},
	}
}

var good = map[string]func() *Survey{"space.good": spaceSurvey, "planar.good": planarSurvey}

// What stands in testdata is what a person would expect to see, and both ways
// between it and the values in memory lose nothing.
func TestGoodFolders(t *testing.T) {
	for name, make := range good {
		t.Run(name, func(t *testing.T) {
			golden := filepath.Join("testdata", name)
			got, err := Read(golden)
			if err != nil {
				t.Fatal(err)
			}
			if diff := cmp.Diff(make(), got); diff != "" {
				t.Errorf("read (-want +got):\n%s", diff)
			}
			out := filepath.Join(t.TempDir(), "a", "b")
			if err := Write(out, make()); err != nil {
				t.Fatal(err)
			}
			sameFiles(t, out, golden)
		})
	}
}

// sameFiles fails unless two folders hold the same files with the same bytes.
func sameFiles(t *testing.T, got, want string) {
	t.Helper()
	if diff := cmp.Diff(tree(t, want), tree(t, got)); diff != "" {
		t.Errorf("%s against %s (-want +got):\n%s", got, want, diff)
	}
}

func tree(t *testing.T, dir string) map[string]string {
	t.Helper()
	files := make(map[string]string)
	err := fs.WalkDir(os.DirFS(dir), ".", func(path string, d fs.DirEntry, err error) error {
		if err == nil && !d.IsDir() {
			var b []byte
			b, err = os.ReadFile(filepath.Join(dir, path))
			files[path] = string(b)
		}
		return err
	})
	if err != nil {
		t.Fatal(err)
	}
	return files
}

// Order of columns, line ends of other systems, a byte order mark, blanks and
// empty lines are nobody's mistake.
func TestReadsWhatSpreadsheetsWrite(t *testing.T) {
	dir := copyOf(t, "space.good")
	edit(t, dir, "robots/s-2/keyframes.csv", func(s string) string {
		var out strings.Builder
		out.WriteString("\ufeff")
		for line := range strings.Lines(s) {
			f := strings.Split(strings.TrimSpace(line), ",")
			f[0], f[9] = f[9], f[0]
			out.WriteString(" " + strings.Join(f, " , ") + " \r\n\r\n")
		}
		return out.String()
	})
	edit(t, dir, "ties.csv", func(s string) string { return strings.ReplaceAll(s, ",inf,0,0,", ",Inf,,,") })
	got, err := Read(dir)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(spaceSurvey(), got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
}

func TestGzippedTables(t *testing.T) {
	dir := copyOf(t, "space.good")
	for _, name := range []string{"ties.csv", "robots/carrier_1/relative.csv"} {
		text := edit(t, dir, name, nil)
		if err := os.WriteFile(filepath.Join(dir, name+".gz"), gzipped(t, text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	got, err := Read(dir)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(spaceSurvey(), got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
}

func TestWarnings(t *testing.T) {
	dir := copyOf(t, "space.good")
	for _, name := range []string{"places.csv", "robots/s-2/scans.csv.gz", ".hidden"} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte("anything"), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	if err := os.MkdirAll(filepath.Join(dir, "results", "report"), 0o755); err != nil {
		t.Fatal(err)
	}
	edit(t, dir, "truth.csv", func(s string) string {
		s = strings.ReplaceAll(strings.TrimSpace(s), "\n", ",\n")
		return strings.Replace(s, "qw,", "qw,temperature", 1) + ","
	})
	got, err := Read(dir)
	if err != nil {
		t.Fatal(err)
	}
	want := []string{
		`truth.csv: not read, unknown column: "temperature"`,
		`truth.csv:3: the last line has no line end: was the file cut short?`,
		`places.csv: not read by this version`,
		`robots/s-2/scans.csv.gz: not read by this version`,
	}
	if diff := cmp.Diff(want, got.Warnings); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	got.Warnings = nil
	if diff := cmp.Diff(spaceSurvey(), got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
}

func TestReadNoFolder(t *testing.T) {
	dir := t.TempDir()
	if _, err := Read(filepath.Join(dir, "none")); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("got %v, want %v", err, fs.ErrNotExist)
	}
	_, err := Read(dir)
	if want := "survey.yaml: found no such file, expected a survey folder, which has one"; err == nil || err.Error() != want {
		t.Errorf("got %v, want %s", err, want)
	}
}

// copyOf copies a folder of testdata to where it may be changed.
func copyOf(t testing.TB, name string) string {
	t.Helper()
	dir := filepath.Join(t.TempDir(), name)
	if err := os.CopyFS(dir, os.DirFS(filepath.Join("testdata", name))); err != nil {
		t.Fatal(err)
	}
	return dir
}

// edit replaces a file by what change makes of it, or removes it when change is
// nil, and returns the former text.
func edit(t testing.TB, dir, name string, change func(string) string) string {
	t.Helper()
	path := filepath.Join(dir, name)
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if change == nil {
		err = os.Remove(path)
	} else {
		err = os.WriteFile(path, []byte(change(string(b))), 0o644)
	}
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

func gzipped(t testing.TB, text string) []byte {
	t.Helper()
	var b bytes.Buffer
	z := gzip.NewWriter(&b)
	if _, err := io.WriteString(z, text); err != nil {
		t.Fatal(err)
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func gunzip(t testing.TB, path string) string {
	t.Helper()
	f, err := os.Open(path)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	z, err := gzip.NewReader(f)
	if err != nil {
		t.Fatal(err)
	}
	b, err := io.ReadAll(z)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}
