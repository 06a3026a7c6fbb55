package partition

import (
	"bytes"
	"compress/gzip"
	"encoding/csv"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"text/tabwriter"
	"time"
)

// splitSets are the published pose graphs of the comparison; generated-cube-1728
// is made after the manner of a published one.
var splitSets = []string{
	"intel-1228", "intel", "mit-killian", "csail", "manhattan3500", "city10000", "small-grid",
	"sphere2500", "sphere-dense", "parking-garage", "cubicle-block", "generated-cube-1728",
}

// splitLacking skips the test, or fails it where everything must be present.
func splitLacking(tb testing.TB, what string, err error) {
	tb.Helper()
	if os.Getenv("SELVAGE_CI") == "1" {
		tb.Fatalf("%s: %v", what, err)
	}
	tb.Skipf("%s: %v", what, err)
}

// splitDataset reads the measurement pairs of a published set.
func splitDataset(tb testing.TB, name string) (n int, edges [][2]int32) {
	tb.Helper()
	shared := os.Getenv("SELVAGE_SHARED")
	if shared == "" {
		shared = filepath.Join("..", "..", "shared")
	}
	f, err := os.Open(filepath.Join(shared, "datasets", name, "relative.csv.gz"))
	if err != nil {
		splitLacking(tb, "published sets", err)
	}
	defer f.Close()
	z, err := gzip.NewReader(f)
	if err != nil {
		tb.Fatal(err)
	}
	r := csv.NewReader(z)
	r.ReuseRecord = true
	if _, err := r.Read(); err != nil {
		tb.Fatal(err)
	}
	for {
		row, err := r.Read()
		if err == io.EOF {
			return n, edges
		}
		if err != nil {
			tb.Fatal(err)
		}
		var e [2]int32
		for i := range e {
			x, err := strconv.ParseInt(row[i], 10, 32)
			if err != nil {
				tb.Fatal(err)
			}
			e[i] = int32(x)
			n = max(n, int(x)+1)
		}
		edges = append(edges, e)
	}
}

// gpmetis splits the graph with METIS 5 (Karypis and Kumar, 1998), edges
// weighted by their number of repetitions.
func gpmetis(tb testing.TB, n int, edges [][2]int32, k int, args ...string) []int32 {
	tb.Helper()
	g := newSplitGraph(n, edges)
	var b bytes.Buffer
	fmt.Fprintf(&b, "%d %d 001\n", n, len(g.adj)/2)
	for v := range n {
		for i := g.start[v]; i < g.start[v+1]; i++ {
			fmt.Fprintf(&b, " %d %d", g.adj[i]+1, g.mult[i])
		}
		fmt.Fprintln(&b)
	}
	file := filepath.Join(tb.TempDir(), "graph")
	if err := os.WriteFile(file, b.Bytes(), 0o600); err != nil {
		tb.Fatal(err)
	}
	args = append(args, file, strconv.Itoa(k))
	if out, err := exec.Command("gpmetis", args...).CombinedOutput(); err != nil {
		tb.Fatalf("gpmetis %v: %v\n%s", args, err, out)
	}
	out, err := os.ReadFile(fmt.Sprintf("%s.part.%d", file, k))
	if err != nil {
		tb.Fatal(err)
	}
	piece := make([]int32, 0, n)
	for _, line := range strings.Fields(string(out)) {
		p, err := strconv.ParseInt(line, 10, 32)
		if err != nil {
			tb.Fatal(err)
		}
		piece = append(piece, int32(p))
	}
	return piece
}

// TestSplitAgainstMETIS compares boundary poses with those of gpmetis -contig
// on published pose graphs, and logs the other figures beside them. Without
// -contig the parts are often broken, and then not what a robot could map.
func TestSplitAgainstMETIS(t *testing.T) {
	if _, err := exec.LookPath("gpmetis"); err != nil {
		splitLacking(t, "gpmetis", err)
	}
	var table strings.Builder
	w := tabwriter.NewWriter(&table, 0, 0, 2, ' ', 0)
	fmt.Fprintln(w, "set\tk\tours\t-contig\tplain\t-contig vol\tours ms")
	cell := func(q SplitQuality) string {
		note := ""
		if !q.Connected {
			note = " broken"
		}
		return fmt.Sprintf("%d/%d cut %d bal %.3f%s", q.Boundary, q.BoundaryLargest, q.Cut, q.Balance, note)
	}
	for _, set := range splitSets {
		n, edges := splitDataset(t, set)
		for _, k := range []int{2, 4, 8, 16} {
			begin := time.Now()
			piece, err := Split(n, edges, k, 1)
			took := time.Since(begin)
			if err != nil {
				t.Errorf("%s k=%d: %v", set, k, err)
				continue
			}
			ours := checkSplit(t, n, edges, k, piece)
			contig := MeasureSplit(n, edges, gpmetis(t, n, edges, k, "-contig"))
			plain := MeasureSplit(n, edges, gpmetis(t, n, edges, k))
			vol := MeasureSplit(n, edges, gpmetis(t, n, edges, k, "-contig", "-objtype=vol"))
			fmt.Fprintf(w, "%s\t%d\t%s\t%s\t%s\t%s\t%.0f\n", set, k, cell(ours), cell(contig), cell(plain), cell(vol), took.Seconds()*1e3)
			if float64(ours.Boundary) > 1.10*float64(contig.Boundary) {
				t.Errorf("%s k=%d: %d boundary poses, gpmetis -contig %d", set, k, ours.Boundary, contig.Boundary)
			}
		}
	}
	w.Flush()
	t.Logf("boundary poses / most in one piece\n%s", table.String())
}
