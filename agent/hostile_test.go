package agent

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// siege lets a base say valid messages of wrong content, drawn from rng, between measurements; then a sound one takes over, and the
// agent must follow it.
func siege(t testing.TB, rng *rand.Rand) {
	dim := 2 + rng.IntN(2)
	r := newRobot(t, dim)
	r.walk(1, 0, 25, rng.Uint64())
	r.see(1, 5)
	r.glance(1, 2, 9, "a", lie.Identity())
	r.glance(1, 12, 20, "b", lie.Identity())
	number := func() float64 { return []float64{0, 1, -3, 1e3, -1e6, 9e8, 1e9}[rng.IntN(7)] }
	pose := func() msgs.Pose {
		a := number()
		p := msgs.Pose{T: [3]float64{number(), number(), 0}, Q: [4]float64{2: math.Sin(a / 2), 3: math.Cos(a / 2)}}
		if dim == 3 {
			p.T[2] = number()
		}
		return p
	}
	epoch := func() msgs.Epoch { return msgs.Epoch{Incarnation: rng.Uint64N(4), Number: rng.Uint64N(50)} }
	for range 60 {
		switch rng.IntN(4) {
		case 0:
			w := &msgs.Want{Fleet: "fleet", Robot: "r1", Epoch: epoch(), Term: rng.Uint64N(3), Safe: rng.Uint64N(4), Journal: msgs.JournalID{byte(9 * rng.IntN(2))}}
			for range rng.IntN(6) {
				k := msgs.KeyRef{Robot: "r1", Session: rng.Uint32N(4), ID: rng.Int64N(40) - 5}
				if rng.IntN(2) == 0 {
					k.ByStamp, k.StampNS, k.ID = true, []int64{0, 3, 1 << 62, -1 << 62, r.now + 7}[rng.IntN(5)], 0
				}
				w.Keys = append(w.Keys, k)
			}
			w.Marks = [][]string{nil, {"a"}, {"b", "nowhere"}}[rng.IntN(3)]
			if rng.IntN(2) == 0 {
				w.Gaps = [][2]uint64{{w.Safe + 1, math.MaxUint64}}
			}
			_, _ = r.hear(msgs.KindWant, w) // refused or not
		case 1:
			c := &msgs.Correction{Fleet: "fleet", Robot: "r1", Epoch: epoch(), Term: rng.Uint64N(3), SummaryVersion: rng.Uint64N(9), Dim: r.width()}
			for session := range uint32(3) {
				p := msgs.CorrectedPart{Session: session, Joined: rng.IntN(2) == 0, DatumFromSession: pose(), Island: "x"}
				for id := int64(-1); id < 30; id += 1 + rng.Int64N(9) {
					p.IDs = append(p.IDs, id)
					p.Poses = append(p.Poses, pose())
				}
				for _, m := range [][]string{nil, {"a", "nowhere"}, {"b"}}[rng.IntN(3)] {
					p.Points = append(p.Points, msgs.Point{Mark: m, At: pose().T})
				}
				c.Parts = append(c.Parts, p)
			}
			_, _ = r.hear(msgs.KindCorrection, c)
		case 2:
			for range 1 + rng.IntN(30) {
				r.now += second
				if _, err := r.Handle(r.now, Tick{}); err != nil {
					t.Logf("tick: %v", err)
				}
			}
		case 3:
			r.see(1, rng.Int64N(25))
			stamp := []int64{0, 3, 1 << 62, math.MaxInt64, -1, r.now + 7}[rng.IntN(6)]
			sight := Sight{Sense: posegraph.Sense(1 + rng.IntN(4)), Value: [3]float64{math.Abs(number()), 1, 0.1}, Info: lie.Mat3{400, 0, 0, 0, 400, 0, 0, 0, 400}, Mount: lie.Identity()}
			mark := []string{"a", "b", fmt.Sprint("c", rng.IntN(3))}[rng.IntN(3)]
			var e Event = Sighting{Session: 1, ID: rng.Int64N(26), Mark: mark, Sight: sight}
			switch rng.IntN(4) {
			case 0:
				e = Sighting{Session: 1, ByStamp: true, StampNS: stamp, Mark: mark, Sight: sight}
			case 1:
				e = Tie{From: at(1, stamp), To: msgs.KeyRef{Robot: "r2", Session: 1, ID: 7}, Sight: &sight}
			}
			_, _ = r.Handle(r.now, e) // refused or not
		}
	}
	r.do(Keyframe{Session: 1, ID: 100, StampNS: r.now, Pose: lie.Identity()})
	r.do(Relative{Session: 1, From: 24, To: 100, Z: lie.Identity(), Info: sigmas(0.1, 0.1)})
	r.see(1, 100)
	out := r.tick(100)
	if len(kinds(out, msgs.KindSummary)) == 0 || len(kinds(out, msgs.KindHeartbeat)) < 4 || len(kinds(out, msgs.KindTie)) == 0 {
		t.Fatalf("%d summaries, %d heartbeats and %d ties in 100 s", len(kinds(out, msgs.KindSummary)), len(kinds(out, msgs.KindHeartbeat)), len(kinds(out, msgs.KindTie)))
	}
	c := bent(r.Agent, r.version, 1)
	c.Epoch.Incarnation, c.Term = 9, 9
	if _, err := r.hear(msgs.KindCorrection, c); err != nil {
		t.Fatal(err)
	}
	track := r.Tracks()[0]
	var got, want []lie.SE3
	for k, id := range c.Parts[0].IDs {
		got = append(got, track.DatumFromSession.Mul(track.Poses[r.sessions[0].index[id]]))
		want = append(want, lie.FromQuat(c.Parts[0].Poses[k].T, c.Parts[0].Poses[k].Q))
	}
	size := 1.0
	for i := range want {
		for _, x := range want[i].T {
			size = max(size, math.Abs(x))
		}
	}
	if off := apart(got, want); !(off <= 1e-9*size) || r.Applied() != c.Epoch || len(r.Tracks()) != 1 {
		t.Errorf("junctions off by %g of %g, applied %v, %d sessions", off, size, r.Applied(), len(r.Tracks()))
	}
}

func TestSiege(t *testing.T) {
	for seed := range uint64(40) {
		t.Run(fmt.Sprint(seed), func(t *testing.T) { siege(t, rand.New(rand.NewPCG(seed, 77))) })
	}
}

func FuzzSiege(f *testing.F) {
	f.Add(uint64(1), uint64(2))
	f.Fuzz(func(t *testing.T, a, b uint64) { siege(t, rand.New(rand.NewPCG(a, b))) })
}
