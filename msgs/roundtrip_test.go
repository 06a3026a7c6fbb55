package msgs

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"pgregory.net/rapid"
)

// asSent compares everything but the matrices, which sameMatrices compares, and what float32 rounds.
var asSent = cmp.Options{
	cmpopts.EquateEmpty(), cmp.Comparer(func(a, b Pose) bool { return a == b || poseError(a, b) <= 1e-15 }),
	cmpopts.IgnoreFields(Junction{}, "TravelM"), cmpopts.IgnoreFields(Clique{}, "H", "B"),
	cmpopts.IgnoreFields(CorrectedPart{}, "Cov"), cmpopts.IgnoreFields(Tie{}, "Info"),
}

// sameMatrix reports whether got is m to the given error relative to sqrt(m_ii m_jj). A row shorter than tiny may be lost.
func sameMatrix(m, got []float64, limit float64) bool {
	d := int(math.Sqrt(float64(len(m))))
	for i := range d {
		for j := range d {
			si, sj := math.Sqrt(m[i*d+i]), math.Sqrt(m[j*d+j])
			allowed := limit * si * sj
			if min(si, sj) <= 1.001*tiny {
				allowed = 1.001 * tiny * max(si, sj, tiny)
			}
			if !(math.Abs(m[i*d+j]-got[i*d+j]) <= allowed) {
				return false
			}
		}
	}
	return true
}

func float32Limit(d int) float64 { return float64(d) * 0x1p-22 }

// sameMatrices compares what float32 rounds.
func sameMatrices(a, b any) bool {
	switch a := a.(type) {
	case *Tie:
		return sameMatrix(a.Info, b.(*Tie).Info, 1e-14)
	case *Summary:
		for i := range a.Parts {
			p, q := &a.Parts[i], &b.(*Summary).Parts[i]
			for k := range p.Junctions {
				if math.Abs(p.Junctions[k].TravelM-q.Junctions[k].TravelM) > 0x1p-24*p.Junctions[k].TravelM+1e-45 {
					return false
				}
			}
			for k := range p.Cliques {
				c, e := &p.Cliques[k], &q.Cliques[k]
				if !sameMatrix(c.H, e.H, float32Limit(len(c.B))) {
					return false
				}
				for n := range c.B {
					if math.Abs(c.B[n]-e.B[n]) > 0x1p-24*math.Abs(c.B[n])+1e-45 {
						return false
					}
				}
			}
		}
	case *Correction:
		for i := range a.Parts {
			for k, m := range a.Parts[i].Cov {
				if !sameMatrix(m, b.(*Correction).Parts[i].Cov[k], float32Limit(a.Dim*len(a.Parts[i].CovNodes[k]))) {
					return false
				}
			}
		}
	}
	return true
}

func comeBack(t interface {
	Helper()
	Fatalf(string, ...any)
}, m message) []byte {
	t.Helper()
	b, err := m.value.Marshal()
	if err != nil {
		t.Fatalf("%s: %v", m.name, err)
	}
	got, err := m.decode(b)
	if err != nil {
		t.Fatalf("%s: %v", m.name, err)
	}
	if d := cmp.Diff(any(m.value), got, asSent); d != "" {
		t.Fatalf("%s: -sent +read\n%s", m.name, d)
	}
	if !sameMatrices(m.value, got) {
		t.Fatalf("%s: sent %+v, read %+v", m.name, m.value, got)
	}
	return b
}

func drawNodes(t *rapid.T, n, least int) []int {
	all := make([]int, n)
	for i := range all {
		all[i] = i
	}
	all = rapid.Permutation(all).Draw(t, "nodes")
	return all[:rapid.IntRange(least, min(n, 8)).Draw(t, "k")]
}

func drawMatrix(t *rapid.T, d int) []float64 {
	rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "seed"), 0))
	return gram(rng, d, rapid.IntRange(0, d+2).Draw(t, "rank"), rapid.Float64Range(0, 12).Draw(t, "decades"))
}

func drawIDs(t *rapid.T, least int) []int64 {
	ids := rapid.SliceOfNDistinct(rapid.Int64(), least, 12, rapid.ID).Draw(t, "ids")
	slices.Sort(ids)
	return ids
}

func drawHeader(t *rapid.T) Header {
	h := Header{
		Fleet: rapid.StringMatching(`[A-Za-z0-9][A-Za-z0-9_-]{0,31}`).Draw(t, "fleet"), Robot: rapid.StringMatching(`[A-Za-z0-9][A-Za-z0-9_-]{0,31}`).Draw(t, "robot"),
		Number: rapid.Uint64Min(1).Draw(t, "number"), Session: rapid.Uint32().Draw(t, "session"),
	}
	copy(h.Journal[:], rapid.SliceOfN(rapid.Byte(), 16, 16).Draw(t, "journal"))
	if rapid.Bool().Draw(t, "signed") {
		h.Signature = rapid.SliceOfN(rapid.Byte(), 64, 64).Draw(t, "signature")
	}
	return h
}

func drawSummary(t *rapid.T) *Summary {
	s := &Summary{
		Header: drawHeader(t), Version: rapid.Uint64().Draw(t, "version"), Dim: rapid.SampledFrom([]int{3, 6}).Draw(t, "dim"),
		Answers: Epoch{rapid.Uint64().Draw(t, "incarnation"), rapid.Uint64().Draw(t, "epoch")},
	}
	for i := range rapid.IntRange(0, 3).Draw(t, "parts") {
		p := Part{Session: uint32(i * 3), Cost: rapid.Float64Range(0, 1e300).Draw(t, "cost"), Keyframes: rapid.IntRange(0, MaxKeyframes).Draw(t, "keyframes")}
		for _, id := range drawIDs(t, 1) {
			p.Junctions = append(p.Junctions, Junction{
				ID: id, Pose: drawPose(t, s.Dim), TravelM: rapid.Float64Range(0, 1e6).Draw(t, "travel"), StampNS: rapid.Int64().Draw(t, "stamp"),
				Resolved: rapid.SliceOfN(rapid.Int64(), 0, 2).Draw(t, "resolved"),
			})
		}
		for range rapid.IntRange(0, 3).Draw(t, "cliques") {
			if len(p.Junctions) < 2 {
				break
			}
			c := Clique{Nodes: drawNodes(t, len(p.Junctions), 2)}
			d := s.Dim * (len(c.Nodes) - 1)
			c.H = drawMatrix(t, d)
			c.B = rapid.SliceOfN(rapid.Float64Range(-1e30, 1e30), d, d).Draw(t, "b")
			p.Cliques = append(p.Cliques, c)
		}
		s.Parts = append(s.Parts, p)
	}
	return s
}

func TestAnySummaryComesBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) { comeBack(t, message{"summary", drawSummary(t), decoder(DecodeSummary)}) })
}

func TestAnyCorrectionComesBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		h := drawHeader(t)
		c := &Correction{
			Fleet: h.Fleet, Robot: h.Robot, Signature: h.Signature, Term: h.Number, SummaryVersion: rapid.Uint64().Draw(t, "version"),
			Dim: rapid.SampledFrom([]int{3, 6}).Draw(t, "dim"), Epoch: Epoch{h.Number, 1},
		}
		for i := range rapid.IntRange(0, 3).Draw(t, "parts") {
			p := CorrectedPart{Session: uint32(i), Joined: rapid.Bool().Draw(t, "joined"), Island: rapid.StringMatching(`[ -~ä]{0,20}`).Draw(t, "island"), IDs: drawIDs(t, 0)}
			for range p.IDs {
				p.Poses = append(p.Poses, drawPose(t, c.Dim))
			}
			if len(p.IDs) > 0 || rapid.Bool().Draw(t, "placed") {
				p.DatumFromSession = drawPose(t, c.Dim)
			}
			for range rapid.IntRange(0, 2).Draw(t, "cov") {
				if len(p.IDs) == 0 {
					break
				}
				nodes := drawNodes(t, len(p.IDs), 1)
				p.CovNodes = append(p.CovNodes, nodes)
				p.Cov = append(p.Cov, drawMatrix(t, c.Dim*len(nodes)))
			}
			c.Parts = append(c.Parts, p)
		}
		comeBack(t, message{"correction", c, decoder(DecodeCorrection)})
	})
}

func TestAnyTieComesBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		h := drawHeader(t)
		x := &Tie{
			Header: h, ID: rapid.StringMatching(`[!-~]{1,40}`).Draw(t, "id"), Dim: rapid.SampledFrom([]int{3, 6}).Draw(t, "dim"),
			From: KeyRef{Robot: h.Robot, Session: h.Session, ID: rapid.Int64().Draw(t, "id")},
			To:   KeyRef{Robot: "r-" + h.Robot[:1], ByStamp: true, StampNS: rapid.Int64().Draw(t, "stamp")}, StampNS: rapid.Int64().Draw(t, "stamp"),
		}
		x.Pose = drawPose(t, x.Dim)
		x.Info = drawMatrix(t, x.Dim)
		b := comeBack(t, message{"tie", x, decoder(DecodeTie)})
		if got, _ := DecodeTie(b); got.Pose != x.Pose {
			t.Fatalf("pose %v became %v", x.Pose, got.Pose)
		}
	})
}

func TestAnyWantComesBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		h := drawHeader(t)
		w := &Want{
			Fleet: h.Fleet, Robot: h.Robot, Journal: h.Journal, Signature: h.Signature, Safe: rapid.Uint64Range(0, 1<<40).Draw(t, "safe"),
			PeriodMS: rapid.Uint32().Draw(t, "period"), Term: h.Number,
		}
		for range rapid.IntRange(0, 9).Draw(t, "keys") {
			k := KeyRef{Robot: h.Robot, Session: rapid.Uint32().Draw(t, "session"), ByStamp: rapid.Bool().Draw(t, "by stamp")}
			if v := rapid.Int64().Draw(t, "key"); k.ByStamp {
				k.StampNS = v
			} else {
				k.ID = v
			}
			w.Keys = append(w.Keys, k)
		}
		last := w.Safe
		for range rapid.IntRange(0, 4).Draw(t, "gaps") {
			first := last + rapid.Uint64Range(1, 1<<40).Draw(t, "first")
			last = first + rapid.Uint64Range(0, 1<<40).Draw(t, "length")
			w.Gaps = append(w.Gaps, [2]uint64{first, last})
		}
		comeBack(t, message{"want", w, decoder(DecodeWant)})
	})
}
