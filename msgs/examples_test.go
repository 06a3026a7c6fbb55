package msgs

import (
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
)

var update = flag.Bool("update", false, "write the golden files anew")

// message is what every kind has in common, for tests that do not care which it is.
type message struct {
	name   string
	value  interface{ Marshal() ([]byte, error) }
	decode func([]byte) (any, error)
}

func decoder[T any](f func([]byte) (*T, error)) func([]byte) (any, error) {
	return func(b []byte) (any, error) {
		x, err := f(b)
		if err != nil {
			return nil, err
		}
		return x, nil
	}
}

// examples has one message of each kind with every field in use, and summaries and corrections of either dimension. Numbers
// are such that neither float32 nor a rotation vector rounds them.
func examples() []message {
	header := Header{
		Fleet: "site-3", Robot: "r1", Journal: JournalID{1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 14, 15, 16}, Number: 300, Session: 2,
		Signature: []byte(strings.Repeat("s", 64)),
	}
	unsigned := header
	unsigned.Signature = nil
	epoch := Epoch{Incarnation: 1 << 40, Number: 17}
	turned := Pose{T: [3]float64{1.5, -2.25, 0}, Q: [4]float64{0, 0, 1, 0}}
	still := Pose{T: [3]float64{-1e6, 0.125, 0}, Q: [4]float64{0, 0, 0, 1}}
	high := Pose{T: [3]float64{1, 2, 3}, Q: [4]float64{0, 1, 0, 0}}
	summary := Summary{
		Header: header, Version: 9, Answers: epoch, Dim: 3,
		Parts: []Part{{
			Session: 1, Cost: 0.5, Keyframes: 40,
			Junctions: []Junction{
				{ID: -3, Pose: turned, StampNS: 1_700_000_000_000_000_000},
				{ID: 5, Pose: still, TravelM: 12.5, StampNS: 1_700_000_001_000_000_000, Resolved: []int64{1_700_000_001_000_000_000, 1_700_000_000_900_000_000}},
				{ID: 1 << 40, Pose: turned, TravelM: 20, StampNS: 1_700_000_000_500_000_000},
			},
			Cliques: []Clique{
				{Nodes: []int{0, 1}, H: []float64{4, 2, 0, 2, 5, 0, 0, 0, 0}, B: []float64{1, -2, 0.5}},
				{Nodes: []int{2, 0}, H: []float64{16, 0, 0, 0, 16, 0, 0, 0, 64}, B: []float64{0, 0, 0}},
			},
		}, {
			Session: 7, Junctions: []Junction{{ID: 0, Pose: still}},
		}},
	}
	space := Summary{
		Header: unsigned, Version: 1, Dim: 6,
		Parts: []Part{{Junctions: []Junction{{ID: 1, Pose: high}, {ID: 2, Pose: turned}}, Cliques: []Clique{{Nodes: []int{1, 0}, H: diagonal(1, 4, 9, 16, 25, 36), B: make([]float64, 6)}}}},
	}
	marks := Summary{
		Header: unsigned, Version: 2, Dim: 6,
		Parts: []Part{{
			Session: 1, Junctions: []Junction{{ID: 1, Pose: high}, {ID: 2, Pose: turned}},
			Points: []Point{{Mark: "m1", At: [3]float64{1, 2, 3}}, {Mark: "m3", At: [3]float64{-4, 5, 0.5}}}, Seen: []string{"m0", "m2"},
			Levels: []Level{{Node: 1, Up: [3]float64{0, 0.6, 0.8}, Sigma: 0.01}},
			Cliques: []Clique{
				{Nodes: []int{1, 0}, H: diagonal(1, 4, 9, 16, 25, 36), B: make([]float64, 6)},
				{Nodes: []int{0}, Points: []int{1, 0}, H: diagonal(1, 4, 9, 16, 25, 36), B: []float64{0, 1, 0, -2, 0, 0.5}},
			},
		}},
	}
	return []message{
		{"heartbeat", &Heartbeat{Header: header, NewestNumber: 301, Applied: epoch, SummaryVersion: 9, HighestIncarnation: 1 << 40, State: "sending again", StampNS: -5}, decoder(DecodeHeartbeat)},
		{"tie", &Tie{
			Header: header, ID: "r1.01020304.300", From: KeyRef{Robot: "r1", Session: 2, ID: 77}, To: KeyRef{Robot: "r2", ByStamp: true, StampNS: 1_700_000_000_123_456_789},
			Pose: Pose{T: [3]float64{0.1, 0.2, 0}, Q: [4]float64{0, 0, 0.6, 0.8}}, Info: []float64{4, 2, 0, 2, 5, 0, 0, 0, 0}, Dim: 3, Source: "tag camera", StampNS: 1_700_000_000_123_456_789,
		}, decoder(DecodeTie)},
		{"tie-space", &Tie{
			Header: unsigned, ID: "t1", From: KeyRef{Robot: "r2"}, To: KeyRef{Robot: "r1", ID: 1}, Pose: high, Info: diagonal(1, 4, 9, 16, 25, 36), Dim: 6,
		}, decoder(DecodeTie)},
		{"tie-sight", &Tie{
			Header: unsigned, ID: "s1", From: KeyRef{Robot: "r1", ByStamp: true, StampNS: 5}, To: KeyRef{Robot: "r2", ByStamp: true, StampNS: 5}, Dim: 3,
			Sight: &Sight{
				Sense: RangeBearing, Value: [3]float64{2.5, -0.75}, Info: [9]float64{4, 2, 0, 2, 5, 0, 0, 0, 0},
				Mount: Pose{T: [3]float64{0.1, 0, 0.4}, Q: [4]float64{0, 0, 0, 1}}, Spot: [3]float64{0, 0.25, 0},
			},
		}, decoder(DecodeTie)},
		{"summary", &summary, decoder(DecodeSummary)},
		{"summary-marks", &marks, decoder(DecodeSummary)},
		{"summary-space", &space, decoder(DecodeSummary)},
		{"summary-unchanged", &Summary{Header: unsigned, Version: 9, Answers: epoch, Unchanged: true, Dim: 6}, decoder(DecodeSummary)},
		{"want", &Want{
			Fleet: "site-3", Robot: "r1", Epoch: epoch, Term: 4, Safe: 250, Journal: header.Journal, PeriodMS: 2000, Signature: header.Signature,
			Keys: []KeyRef{{Robot: "r1", Session: 2, ID: 77}, {Robot: "r1", ByStamp: true, StampNS: 1_700_000_000_000_000_000}, {Robot: "r1", Session: 1, ID: -1 << 63}},
			Gaps: [][2]uint64{{252, 252}, {254, 1<<64 - 1}}, Marks: []string{"gate-1", "gate-2"},
		}, decoder(DecodeWant)},
		{"correction", &Correction{
			Fleet: "site-3", Robot: "r1", Epoch: epoch, Term: 4, SummaryVersion: 9, Dim: 3, Signature: header.Signature,
			Parts: []CorrectedPart{
				{
					Session: 1, Joined: true, IDs: []int64{-3, 5}, Poses: []Pose{turned, still}, DatumFromSession: turned, Island: "r1",
					CovNodes: [][]int{{1, 0}, {0}}, Cov: [][]float64{diagonal(1, 4, 9, 16, 25, 36), diagonal(0.25, 0, 1)},
				},
				{Session: 2},
			},
		}, decoder(DecodeCorrection)},
		{"correction-space", &Correction{
			Fleet: "site-3", Robot: "r1", Dim: 6, Parts: []CorrectedPart{{
				IDs: []int64{4}, Poses: []Pose{high}, DatumFromSession: high, Points: []Point{{Mark: "gate-1", At: [3]float64{1, -2, 0.5}}},
			}},
		}, decoder(DecodeCorrection)},
		{"verdict", &Verdict{
			Fleet: "site-3", Robot: "r1", Tie: "r1.01020304.300", Verdict: Refused, Reason: "contradicts three ties at two places", Epoch: epoch, Term: 4, StampNS: 8,
			Evidence: Evidence{Statistic: 210.5, DoF: 6, Limit: 22.458, Places: 2, Margin: -31.25}, Signature: header.Signature,
		}, decoder(DecodeVerdict)},
		{"lease", &Lease{Fleet: "site-3", Holder: "base-1", Term: 4, Incarnation: 1 << 40, Signature: header.Signature}, decoder(DecodeLease)},
		{"ruling", &Ruling{
			Fleet: "site-3", Target: OnTie, Robot: "r1", Tie: "r1.01020304.300", Verdict: Refused, By: "lead", Note: "seen through a fence", StampNS: 1_700_000_000_123_456_789,
			Signature: header.Signature,
		}, decoder(DecodeRuling)},
		{"ruling-session", &Ruling{Fleet: "site-3", Target: OnSession, Robot: "r1", Session: 7, Verdict: Open, By: "a", Note: "measured by tape: « 0,5 m »"}, decoder(DecodeRuling)},
	}
}

func diagonal(v ...float64) []float64 {
	m := make([]float64, len(v)*len(v))
	for i, x := range v {
		m[i*len(v)+i] = x
	}
	return m
}

// near tells apart what rounding cannot explain.
var near = cmp.Options{cmpopts.EquateApprox(1e-15, 1e-15), cmpopts.EquateEmpty()}

func TestExamplesComeBack(t *testing.T) {
	for _, m := range examples() {
		b, err := m.value.Marshal()
		if err != nil {
			t.Errorf("%s: %v", m.name, err)
			continue
		}
		got, err := m.decode(b)
		if err != nil {
			t.Errorf("%s: %v", m.name, err)
			continue
		}
		if d := cmp.Diff(any(m.value), got, near); d != "" {
			t.Errorf("%s: -sent +read\n%s", m.name, d)
		}
	}
}

// The bytes of each kind are those of the golden file, so that the format cannot change without being noticed.
func TestGoldenBytes(t *testing.T) {
	for _, m := range examples() {
		b, err := m.value.Marshal()
		if err != nil {
			t.Fatalf("%s: %v", m.name, err)
		}
		path := filepath.Join("testdata", "golden", m.name+".hex")
		if *update {
			if err := os.WriteFile(path, []byte(hexLines(b)), 0o644); err != nil {
				t.Fatal(err)
			}
		}
		want, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		if got := hexLines(b); got != string(want) {
			t.Errorf("%s: the bytes differ from %s:\n%s", m.name, path, cmp.Diff(string(want), got))
		}
		if _, err := m.decode(unhex(t, string(want))); err != nil {
			t.Errorf("%s: golden bytes are refused: %v", m.name, err)
		}
	}
}
