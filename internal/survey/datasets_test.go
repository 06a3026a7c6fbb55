package survey

import (
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// dataset returns the folder of a published pose graph, which is kept outside
// of the module.
func dataset(t testing.TB, name string) string {
	t.Helper()
	shared := os.Getenv("SELVAGE_SHARED")
	if shared == "" {
		shared = filepath.Join("..", "..", "..", "shared")
	}
	dir := filepath.Join(shared, "datasets", name)
	if _, err := os.Stat(dir); err != nil {
		if os.Getenv("SELVAGE_CI") == "1" {
			t.Fatalf("data set missing: %v", err)
		}
		t.Skipf("data set missing, set SELVAGE_SHARED: %v", err)
	}
	return dir
}

// The sizes are those which the notes beside the data sets state.
var published = []struct {
	name             string
	dim, poses, rels int
	closures         int
}{
	{"city10000", 2, 10000, 20687, 10688},
	{"csail", 2, 1045, 1172, 128},
	{"cubicle-block", 3, 5750, 16869, 7621},
	{"intel", 2, 1728, 2512, 785},
	{"intel-1228", 2, 1228, 1483, 256},
	{"manhattan3500", 2, 3500, 5453, 1954},
	{"manhattan3500-info", 2, 3500, 5453, 1954},
	{"mit-killian", 2, 808, 827, 20},
	{"parking-garage", 3, 1661, 6275, 4615},
	{"generated-cube-1728", 3, 1728, 4640, 2913},
	{"small-grid", 3, 125, 297, 173},
	{"sphere-dense", 3, 2500, 9799, 7300},
	{"sphere2500", 3, 2500, 4949, 2450},
}

func TestPublishedSetsRoundTrip(t *testing.T) {
	for _, set := range published {
		t.Run(set.name, func(t *testing.T) {
			t.Parallel()
			dir := dataset(t, set.name)
			first, err := ReadPoseTables(dir)
			if err != nil {
				t.Fatal(err)
			}
			checkSize(t, first, set.dim, set.poses, set.rels, set.closures)
			out := filepath.Join(t.TempDir(), "out")
			if err := Write(out, first); err != nil {
				t.Fatal(err)
			}
			second, err := Read(out)
			if err != nil {
				t.Fatal(err)
			}
			checkSize(t, second, set.dim, set.poses, set.rels, set.closures)
			if len(second.Warnings) > 0 {
				t.Errorf("warnings: %q", second.Warnings)
			}
			poses, infos := rawTables(t, dir)
			worst := 0.0
			for i, m := range second.Robots[0].Relatives {
				if m.Pose != poses[i] {
					t.Fatalf("relative %d: pose %v, in the table %v", i, m.Pose, poses[i])
				}
				got, err := m.Cov.Information(set.dim)
				if err != nil {
					t.Fatal(err)
				}
				worst = max(worst, scaledDifference(got, infos[i]))
			}
			t.Logf("information differs by at most %.2g of its diagonal", worst)
			if worst > 1e-9 {
				t.Errorf("information differs by %g of its diagonal, want at most 1e-9", worst)
			}
		})
	}
}

func checkSize(t *testing.T, s *Survey, dim, poses, rels, closures int) {
	t.Helper()
	n := 0
	for _, m := range s.Robots[0].Relatives {
		if d := m.To - m.From; d != 1 && d != -1 {
			n++
		}
	}
	if s.Meta.Dimension != dim || len(s.Robots[0].Keyframes) != poses || len(s.Robots[0].Relatives) != rels || n != closures {
		t.Fatalf("dimension %d, %d poses, %d relatives, %d not between consecutive; want %d, %d, %d, %d",
			s.Meta.Dimension, len(s.Robots[0].Keyframes), len(s.Robots[0].Relatives), n, dim, poses, rels, closures)
	}
}

// rawTables reads relative.csv in the plainest way.
func rawTables(t *testing.T, dir string) (poses []Pose, infos [][36]float64) {
	t.Helper()
	lines := strings.Split(strings.TrimSpace(gunzip(t, filepath.Join(dir, "relative.csv.gz"))), "\n")
	for _, line := range lines[1:] {
		var v [28]float64
		f := strings.Split(line, ",")
		for i := range v {
			if _, err := fmt.Sscan(f[2+i], &v[i]); err != nil {
				t.Fatal(err)
			}
		}
		p := Pose{T: [3]float64(v[:3]), Q: [4]float64(v[3:7])}
		var m [36]float64
		k := 7
		for i := range 6 {
			for j := i; j < 6; j++ {
				m[6*i+j], m[6*j+i] = v[k], v[k]
				k++
			}
		}
		poses, infos = append(poses, p), append(infos, m)
	}
	return poses, infos
}

// scaledDifference is the largest difference of two information matrices, each
// entry relative to the diagonal of want.
func scaledDifference(got, want [36]float64) (worst float64) {
	for i := range 6 {
		for j := range 6 {
			scale := math.Sqrt(want[7*i] * want[7*j])
			d := math.Abs(got[6*i+j] - want[6*i+j])
			if scale > 0 {
				d /= scale
			}
			worst = max(worst, d)
		}
	}
	return worst
}

// The count is that of the note beside the set: two entries of a planar
// coupling stand in the wrong place.
func TestIndefiniteSetIsRefused(t *testing.T) {
	dir := dataset(t, "cubicle")
	s, err := ReadPoseTables(dir)
	var v *Violations
	if !errors.As(err, &v) || s != nil {
		t.Fatalf("got survey %v and error %v, want violations", s != nil, err)
	}
	if v.Total != 5021 || len(v.List) != shownPerFile {
		t.Errorf("%d violations, %d shown; want 5021, %d", v.Total, len(v.List), shownPerFile)
	}
	for _, x := range v.List {
		if x.File != "relative.csv.gz" || x.Line < 2 || !strings.HasPrefix(x.Found, "an indefinite information matrix") {
			t.Errorf("violation %v", x)
		}
	}
	t.Log(err)
}

func BenchmarkReadPoseTables(b *testing.B) {
	dir := dataset(b, "cubicle-block")
	b.ReportAllocs()
	for b.Loop() {
		if _, err := ReadPoseTables(dir); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkRead(b *testing.B) {
	s, err := ReadPoseTables(dataset(b, "cubicle-block"))
	if err != nil {
		b.Fatal(err)
	}
	out := filepath.Join(b.TempDir(), "out")
	if err := Write(out, s); err != nil {
		b.Fatal(err)
	}
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Read(out); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkWrite(b *testing.B) {
	s, err := ReadPoseTables(dataset(b, "cubicle-block"))
	if err != nil {
		b.Fatal(err)
	}
	out := filepath.Join(b.TempDir(), "out")
	b.ReportAllocs()
	for b.Loop() {
		if err := Write(out, s); err != nil {
			b.Fatal(err)
		}
	}
}
