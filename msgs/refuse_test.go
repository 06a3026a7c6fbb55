package msgs

import (
	"errors"
	"math"
	"strings"
	"testing"

	"google.golang.org/protobuf/encoding/protowire"
	"google.golang.org/protobuf/proto"

	"selvage/msgs/internal/pb"
)

// find returns a fresh example.
func find[T any](t *testing.T, name string) *T {
	t.Helper()
	for _, m := range examples() {
		if m.name == name {
			return m.value.(any).(*T)
		}
	}
	t.Fatalf("no example %s", name)
	return nil
}

func wantError(t *testing.T, what string, err error, text string) {
	t.Helper()
	var fe *FieldError
	switch {
	case err == nil:
		t.Errorf("%s: accepted, want an error with %q", what, text)
	case !errors.As(err, &fe) || fe.Kind == "" || fe.Field == "" || fe.Found == "" || fe.Want == "":
		t.Errorf("%s: %v does not say kind, field, found and expected", what, err)
	case !strings.Contains(err.Error(), text):
		t.Errorf("%s: %v, want an error with %q", what, err, text)
	}
}

func TestMarshalRefuses(t *testing.T) {
	inf, nan := math.Inf(1), math.NaN()
	for _, c := range []struct {
		text  string
		spoil func(x *Summary)
	}{
		{"summary: header.fleet: found \"\", expected 1 to 32", func(x *Summary) { x.Header.Fleet = "" }},
		{"header.robot: found \"a.b\"", func(x *Summary) { x.Header.Robot = "a.b" }},
		{"header.robot: found \"_lease\"", func(x *Summary) { x.Header.Robot = "_lease" }},
		{"header.robot", func(x *Summary) { x.Header.Robot = strings.Repeat("a", 33) }},
		{"signature: found 3", func(x *Summary) { x.Header.Signature = []byte("abc") }},
		{"dim: found 4, expected 3 or 6", func(x *Summary) { x.Dim = 4 }},
		{"parts: found 2, expected none", func(x *Summary) { x.Unchanged = true }},
		{"parts[1].session: found 1, expected more than 1", func(x *Summary) { x.Parts[1].Session = 1 }},
		{"parts: found 1025", func(x *Summary) { x.Parts = make([]Part, 1025) }},
		{"parts[0].junctions: found 0", func(x *Summary) { x.Parts[0].Junctions = nil }},
		{"parts[0].cost: found NaN", func(x *Summary) { x.Parts[0].Cost = nan }},
		{"parts[0].cost: found -1", func(x *Summary) { x.Parts[0].Cost = -1 }},
		{"parts[0].cost: found +Inf", func(x *Summary) { x.Parts[0].Cost = inf }},
		{"parts[0].keyframes: found -1", func(x *Summary) { x.Parts[0].Keyframes = -1 }},
		{"parts[0].junctions[1].id: found -3, expected more than -3", func(x *Summary) { x.Parts[0].Junctions[1].ID = -3 }},
		{"parts[0].junctions[2].pose: found NaN", func(x *Summary) { x.Parts[0].Junctions[2].Pose.T[1] = nan }},
		{"parts[0].junctions[2].pose: found 1e+10", func(x *Summary) { x.Parts[0].Junctions[2].Pose.T[1] = 1e10 }},
		{"parts[0].junctions[2].pose: found 1.0001", func(x *Summary) { x.Parts[0].Junctions[2].Pose.Q[2] = 1.0001 }},
		{"parts[0].junctions[2].pose: found NaN", func(x *Summary) { x.Parts[0].Junctions[2].Pose.Q[2] = nan }},
		{"no height and no tilt", func(x *Summary) { x.Parts[0].Junctions[2].Pose.T[2] = 0.1 }},
		{"no height and no tilt", func(x *Summary) { x.Parts[0].Junctions[2].Pose.Q = [4]float64{1, 0, 0, 0} }},
		{"parts[0].junctions[0].travel_m: found -1", func(x *Summary) { x.Parts[0].Junctions[0].TravelM = -1 }},
		{"parts[0].resolved: found 65537", func(x *Summary) { x.Parts[0].Junctions[0].Resolved = make([]int64, MaxResolved-1) }},
		{"parts[0].cliques[1].nodes: found 1", func(x *Summary) { x.Parts[0].Cliques[1].Nodes = []int{1} }},
		{"parts[0].cliques[1].nodes: found 129", func(x *Summary) { x.Parts[0].Cliques[1].Nodes = make([]int, 129) }},
		{"parts[0].cliques[1].nodes: found 2, expected each index once", func(x *Summary) { x.Parts[0].Cliques[1].Nodes = []int{2, 2} }},
		{"parts[0].cliques[1].nodes: found 3, expected an index below 3", func(x *Summary) { x.Parts[0].Cliques[1].Nodes = []int{2, 3} }},
		{"parts[0].cliques[1].nodes: found -1", func(x *Summary) { x.Parts[0].Cliques[1].Nodes = []int{2, -1} }},
		{"parts[0].cliques[0].h: found 8, expected 9 numbers", func(x *Summary) { x.Parts[0].Cliques[0].H = make([]float64, 8) }},
		{"parts[0].cliques[0].h: found NaN", func(x *Summary) { x.Parts[0].Cliques[0].H[4] = nan }},
		{"parts[0].cliques[0].h: found 1e+71", func(x *Summary) { x.Parts[0].Cliques[0].H[4] = 1e71 }},
		{"parts[0].cliques[0].h.matrix", func(x *Summary) { x.Parts[0].Cliques[0].H[0] = 0.1 }},
		{"parts[0].cliques[0].h.matrix: found 1, expected a symmetric matrix; rows 1 and 0 differ", func(x *Summary) { x.Parts[0].Cliques[0].H[1] = 3 }},
		{"parts[0].cliques[0].b: found 2, expected 3 numbers", func(x *Summary) { x.Parts[0].Cliques[0].B = make([]float64, 2) }},
		{"parts[0].cliques[0].b: found +Inf", func(x *Summary) { x.Parts[0].Cliques[0].B[0] = inf }},
		{"parts[0].cliques[0].b: found 1e+39", func(x *Summary) { x.Parts[0].Cliques[0].B[0] = 1e39 }},
	} {
		x := find[Summary](t, "summary")
		c.spoil(x)
		_, err := x.Marshal()
		wantError(t, "summary", err, c.text)
	}
	for _, c := range []struct {
		text  string
		spoil func(x *Tie)
	}{
		{"tie: header.number", func(x *Tie) { x.Header.Number = 0 }},
		{"tie: id: found \"a b\"", func(x *Tie) { x.ID = "a b" }},
		{"id: found \"\"", func(x *Tie) { x.ID = "" }},
		{"from.robot: found \"\"", func(x *Tie) { x.From.Robot = "" }},
		{"from.stamp_ns: found 4, expected 0", func(x *Tie) { x.From.StampNS = 4 }},
		{"to.id: found 4, expected 0", func(x *Tie) { x.To.ID = 4 }},
		{"to: found the same keyframe", func(x *Tie) { x.To = x.From }},
		{"one end at robot r1", func(x *Tie) { x.From.Robot = "r3" }},
		{"dim: found 0", func(x *Tie) { x.Dim = 0 }},
		{"pose: found 2, expected a quaternion", func(x *Tie) { x.Pose.Q = [4]float64{0, 0, 2, 0} }},
		{"info: found 0, expected 9", func(x *Tie) { x.Info = nil }},
		{"info: found NaN", func(x *Tie) { x.Info[0] = nan }},
		{"info.matrix: found -4", func(x *Tie) { x.Info[0] = -4 }},
		{"source: found \"a\\nb\"", func(x *Tie) { x.Source = "a\nb" }},
		{"source: found \"\\xff\"", func(x *Tie) { x.Source = "\xff" }},
	} {
		x := find[Tie](t, "tie")
		c.spoil(x)
		_, err := x.Marshal()
		wantError(t, "tie", err, c.text)
	}
	for _, c := range []struct {
		text  string
		spoil func(x *Correction)
	}{
		{"corr: fleet", func(x *Correction) { x.Fleet = "*" }},
		{"dim: found 0", func(x *Correction) { x.Dim = 0 }},
		{"parts[1].session: found 1", func(x *Correction) { x.Parts[1].Session = 1 }},
		{"parts[0].poses: found 1, expected 2", func(x *Correction) { x.Parts[0].Poses = x.Parts[0].Poses[:1] }},
		{"parts[0].ids: found -3", func(x *Correction) { x.Parts[0].IDs[1] = -3 }},
		{"parts[0].poses[1].pose: found +Inf", func(x *Correction) { x.Parts[0].Poses[1].T[0] = inf }},
		{"parts[0].datum_from_session.pose: found 0", func(x *Correction) { x.Parts[0].DatumFromSession = Pose{} }},
		{"parts[0].island", func(x *Correction) { x.Parts[0].Island = "a\x00" }},
		{"parts[0].cov: found 1, expected 2", func(x *Correction) { x.Parts[0].Cov = x.Parts[0].Cov[:1] }},
		{"parts[0].cov_nodes[0].nodes: found 2, expected an index below 2", func(x *Correction) { x.Parts[0].CovNodes[0][0] = 2 }},
		{"parts[0].cov[1].size: found 4, expected 9", func(x *Correction) { x.Parts[0].Cov[1] = make([]float64, 4) }},
		{"parts[0].cov[1].value: found NaN", func(x *Correction) { x.Parts[0].Cov[1][3] = nan }},
		{"parts[0].cov[1].matrix", func(x *Correction) { x.Parts[0].Cov[1][0] = -1 }},
	} {
		x := find[Correction](t, "correction")
		c.spoil(x)
		_, err := x.Marshal()
		wantError(t, "correction", err, c.text)
	}
	for _, c := range []struct {
		text  string
		spoil func(x *Want)
	}{
		{"want: robot", func(x *Want) { x.Robot = "" }},
		{"keys[1].robot: found \"r2\", expected r1", func(x *Want) { x.Keys[1].Robot = "r2" }},
		{"gaps[0].range: found [250 252]", func(x *Want) { x.Gaps[0][0] = 250 }},
		{"gaps[1].range: found [254 253]", func(x *Want) { x.Gaps[1][1] = 253 }},
		{"keys: found 65537", func(x *Want) { x.Keys = make([]KeyRef, MaxKeys+1) }},
		{"gaps: found 16385", func(x *Want) { x.Gaps = make([][2]uint64, MaxGaps+1) }},
	} {
		x := find[Want](t, "want")
		c.spoil(x)
		_, err := x.Marshal()
		wantError(t, "want", err, c.text)
	}
	for _, c := range []struct {
		text  string
		spoil func(x *Verdict)
	}{
		{"verdict: verdict: found 0", func(x *Verdict) { x.Verdict = 0 }},
		{"verdict: found 4", func(x *Verdict) { x.Verdict = 4 }},
		{"tie: found", func(x *Verdict) { x.Tie = strings.Repeat("x", 129) }},
		{"reason", func(x *Verdict) { x.Reason = strings.Repeat("x", 513) }},
		{"evidence: found NaN", func(x *Verdict) { x.Evidence.Margin = nan }},
		{"evidence.dof: found -1", func(x *Verdict) { x.Evidence.DoF = -1 }},
		{"evidence.places: found -1", func(x *Verdict) { x.Evidence.Places = -1 }},
	} {
		x := find[Verdict](t, "verdict")
		c.spoil(x)
		_, err := x.Marshal()
		wantError(t, "verdict", err, c.text)
	}
	_, err := (&Heartbeat{Header: Header{Fleet: "f", Robot: "r"}, State: "\x1b[2J"}).Marshal()
	wantError(t, "heartbeat", err, "hb: state")
	_, err = (&Lease{Fleet: "f"}).Marshal()
	wantError(t, "lease", err, "lease: holder")
	_, err = (&Lease{Holder: "f"}).Marshal()
	wantError(t, "lease", err, "lease: fleet")
}

// What a hostile sender could put on the wire but Marshal never writes.
func TestDecodeRefuses(t *testing.T) {
	header := &pb.Header{Fleet: "f", Robot: "r", Journal: make([]byte, 16)}
	part := func(change func(p *pb.Part)) *pb.Summary {
		p := &pb.Part{
			IdSteps: []uint64{1}, Poses: make([]float64, 6), TravelM: make([]float32, 2), StampSteps: make([]int64, 2),
			Cliques: []uint32{2, 0, 1}, Blocks: make([]float32, 9),
		}
		change(p)
		return &pb.Summary{Major: 1, Header: header, Dim: 3, Parts: []*pb.Part{p}}
	}
	nan32 := float32(math.NaN())
	for text, m := range map[string]*pb.Summary{
		"major: found 0":                  {Header: header, Dim: 3},
		"header: found none":              {Major: 1, Dim: 3},
		"header.journal: found 2":         {Major: 1, Dim: 3, Header: &pb.Header{Fleet: "f", Robot: "r", Journal: []byte{1, 2}}},
		"dim: found 5":                    {Major: 1, Dim: 5, Header: header},
		"parts: found 1025":               {Major: 1, Dim: 3, Header: header, Parts: make([]*pb.Part, 1025)},
		"parts[0].poses: found 5":         part(func(p *pb.Part) { p.Poses = p.Poses[:5] }),
		"expected 2 travelled":            part(func(p *pb.Part) { p.TravelM = p.TravelM[:1] }),
		"travel_m: found NaN":             part(func(p *pb.Part) { p.TravelM[1] = nan32 }),
		"junctions[1].id: found 0":        part(func(p *pb.Part) { p.IdSteps[0] = 0 }),
		"junctions[1].id: found -92":      part(func(p *pb.Part) { p.FirstId, p.IdSteps[0] = math.MaxInt64, 1 }),
		"pose: found 4, expected a rot":   part(func(p *pb.Part) { p.Poses[5] = 4 }),
		"pose: found NaN, expected a rot": part(func(p *pb.Part) { p.Poses[5] = math.NaN() }),
		"pose: found +Inf, expected a co": part(func(p *pb.Part) { p.Poses[0] = math.Inf(1) }),
		"resolved: found 2, expected an":  part(func(p *pb.Part) { p.ResolvedNodes, p.ResolvedOffsets = []uint32{2}, []int64{0} }),
		"as many junctions as stamps":     part(func(p *pb.Part) { p.ResolvedNodes = []uint32{1} }),
		"keyframes: found 18446744073709": part(func(p *pb.Part) { p.Keyframes = math.MaxUint64 }),
		"cliques.nodes: found 1, exp":     part(func(p *pb.Part) { p.Cliques = []uint32{1, 0} }),
		"cliques.nodes: found 3, exp":     part(func(p *pb.Part) { p.Cliques = []uint32{3, 0, 1} }),
		"cliques.nodes: found 4294967295": part(func(p *pb.Part) { p.Cliques = []uint32{math.MaxUint32, 0, 1} }),
		"cliques[0].nodes: found 7":       part(func(p *pb.Part) { p.Cliques[2] = 7 }),
		"blocks: found 8, expected 9":     part(func(p *pb.Part) { p.Blocks = p.Blocks[:8] }),
		"cliques[0].h: found NaN":         part(func(p *pb.Part) { p.Blocks[0] = nan32 }),
		"cliques[0].b: found NaN":         part(func(p *pb.Part) { p.Blocks[8] = nan32 }),
	} {
		if len(m.Parts) == MaxParts+1 {
			for i := range m.Parts {
				m.Parts[i] = &pb.Part{}
			}
		}
		b, err := proto.Marshal(m)
		if err != nil {
			t.Fatal(err)
		}
		_, err = DecodeSummary(b)
		wantError(t, text, err, text)
	}

	for name, b := range map[string][]byte{
		"not a protobuf message": {0xff, 0xff},
		"empty":                  {},
		"cut short":              {0x08, 0x01, 0x1a, 0x05, 0x01},
		"too large":              make([]byte, MaxSummary+1),
		"a name that is no text": append([]byte{0x08, 0x01}, 0x1a, 0x04, 0x0a, 0x02, 0xff, 0xfe),
	} {
		for _, m := range examples() {
			_, err := m.decode(b)
			wantError(t, name+" as "+m.name, err, ": found ")
		}
	}
}

func TestVersions(t *testing.T) {
	for _, m := range examples() {
		b, err := m.value.Marshal()
		if err != nil {
			t.Fatal(err)
		}
		// The last of two values counts, as in all of protobuf.
		newer := protowire.AppendVarint(protowire.AppendTag(b, 1, protowire.VarintType), Major+1)
		_, err = m.decode(newer)
		var ve *VersionError
		if !errors.As(err, &ve) || ve.Major != Major+1 || !strings.Contains(err.Error(), "expected 1.x") {
			t.Errorf("%s: a newer major version: %v", m.name, err)
		}
		minor := protowire.AppendVarint(protowire.AppendTag(b, 2, protowire.VarintType), 99)
		minor = protowire.AppendBytes(protowire.AppendTag(minor, 90, protowire.BytesType), []byte("a field of the future"))
		if _, err := m.decode(minor); err != nil {
			t.Errorf("%s: a newer minor version: %v", m.name, err)
		}
	}
	// A newer major version is told as such even when nothing else of it can be read.
	_, err := DecodeTie([]byte{0x08, 0x02, 0x1a, 0x04, 0x0a, 0x02, 0xff, 0xfe})
	var ve *VersionError
	if !errors.As(err, &ve) {
		t.Errorf("an unreadable newer message: %v", err)
	}
}
