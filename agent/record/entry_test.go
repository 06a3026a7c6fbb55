package record

import (
	"bytes"
	"encoding/hex"
	"math"
	"math/rand/v2"
	"testing"

	"github.com/google/go-cmp/cmp"

	"selvage/agent"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// drawn makes events of which every field is anything at all.
type drawn struct{ *rand.Rand }

func (d drawn) floats(v []float64) {
	for i := range v {
		switch d.IntN(8) {
		case 0, 1, 2:
			v[i] = 0
		case 3:
			v[i] = [...]float64{math.Copysign(0, -1), math.Inf(1), math.NaN(), math.SmallestNonzeroFloat64}[d.IntN(4)]
		default:
			v[i] = d.NormFloat64() * math.Pow(10, float64(d.IntN(20)-10))
		}
	}
}

func (d drawn) pose() (x lie.SE3) {
	d.floats(x.R[:])
	d.floats(x.T[:])
	return x
}

func (d drawn) matrix(m []float64, n int) {
	d.floats(m)
	if d.IntN(2) == 0 {
		for i := range n {
			for j := range i {
				m[n*i+j] = m[n*j+i]
			}
		}
	}
}

func (d drawn) text() string {
	b := make([]byte, d.IntN(40))
	for i := range b {
		b[i] = byte(d.Uint32())
	}
	return string(b)
}

func (d drawn) bool() bool { return d.IntN(2) == 0 }

func (d drawn) ref() msgs.KeyRef {
	return msgs.KeyRef{Robot: d.text(), Session: d.Uint32(), ID: int64(d.Uint64()), ByStamp: d.bool(), StampNS: int64(d.Uint64())}
}

func (d drawn) sight() (s agent.Sight) {
	s.Sense = posegraph.Sense(d.IntN(256))
	d.floats(s.Value[:])
	d.matrix(s.Info[:], 3)
	s.Mount = d.pose()
	d.floats(s.Spot[:])
	return s
}

func (d drawn) event() (number uint64, e agent.Event) {
	switch d.IntN(4) {
	case 0:
		return 0, agent.Keyframe{Session: d.Uint32(), ID: int64(d.Uint64()), StampNS: int64(d.Uint64()), Pose: d.pose()}
	case 1:
		r := agent.Relative{Session: d.Uint32(), From: int64(d.Uint64()), To: int64(d.Uint64()), Z: d.pose(), Closure: d.bool()}
		d.matrix(r.Info[:], 6)
		return 0, r
	case 2:
		t := agent.Tie{ID: d.text(), From: d.ref(), To: d.ref(), Z: d.pose(), Source: d.text(), StampNS: int64(d.Uint64())}
		d.matrix(t.Info[:], 6)
		if d.bool() {
			s := d.sight()
			t.Sight = &s
		}
		return d.Uint64(), t
	}
	return 0, agent.Sighting{Session: d.Uint32(), ID: int64(d.Uint64()), ByStamp: d.bool(), StampNS: int64(d.Uint64()), Mark: d.text(), Sight: d.sight()}
}

// sameBits compares floats by their bits.
var sameBits = cmp.Options{
	cmp.AllowUnexported(entry{}),
	cmp.Comparer(func(a, b float64) bool { return math.Float64bits(a) == math.Float64bits(b) }),
}

// TestRoundTrip: what is written reads back to the last bit, and no shorter or longer text reads at all.
func TestRoundTrip(t *testing.T) {
	d := drawn{rand.New(rand.NewPCG(1, 2))}
	for range 3000 {
		number, event := d.event()
		e := entry{int64(d.Uint64()), number, event}
		kind, b := e.append([]byte("before"))
		b = b[len("before"):]
		got, err := decode(kind, b)
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(e, got, sameBits); diff != "" {
			t.Fatal(diff)
		}
		cut := d.IntN(len(b))
		if _, err := decode(kind, b[:cut]); err == nil {
			t.Fatalf("%T: %d bytes of %d pass", event, cut, len(b))
		}
		if _, err := decode(kind, append(b, 0)); err == nil {
			t.Fatalf("%T: a byte too many passes", event)
		}
	}
}

func TestStateRoundTrip(t *testing.T) {
	s := agent.State{Incarnation: 1, Term: 2, Applied: msgs.Epoch{Incarnation: 3, Number: 4}, Version: 5, Safe: math.MaxUint64}
	b := appendState(nil, s)
	if got, err := decodeState(b); err != nil || got != s {
		t.Errorf("%+v, %v", got, err)
	}
	for n := range len(b) {
		if _, err := decodeState(b[:n]); err == nil {
			t.Errorf("%d bytes pass", n)
		}
	}
	if _, err := decodeState(append(b, 0)); err == nil {
		t.Error("a byte too many passes")
	}
}

// The bytes on the disks of robots that are out there.
func TestGolden(t *testing.T) {
	quarter := lie.SE3{R: lie.Mat3{0, -1, 0, 1, 0, 0, 0, 0, 1}, T: [3]float64{2, 0, 0}}
	info := [36]float64{0: 4, 1: 1, 6: 1, 7: 4, 35: 16}
	sight := agent.Sight{Sense: posegraph.Range, Value: [3]float64{8, 0, 0}, Info: lie.Mat3{0: 16}, Mount: quarter, Spot: [3]float64{0, 0, 0.5}}
	const at = "0800000000000000"
	const pose = "0a03" + "000000000000f0bf" + "000000000000f03f" + "000000000000f03f" + "0000000000000040"
	const matrix = "01" + "430010" + "0000000000001040" + "000000000000f03f" + "0000000000001040" + "0000000000003040"
	const seen = "02" + "01" + "0000000000002040" + "01" + "01" + "0000000000003040" + pose + "04" + "000000000000e03f"
	for _, c := range []struct {
		number uint64
		event  agent.Event
		kind   byte
		want   string
	}{
		{0, agent.Keyframe{Session: 1, ID: -2, StampNS: 3, Pose: quarter}, 1, "01" + at + "01000000" + "feffffffffffffff" + "0300000000000000" + pose},
		{0, agent.Relative{Session: 1, From: 2, To: 3, Z: quarter, Info: info, Closure: true}, 2,
			"01" + at + "01000000" + "0200000000000000" + "0300000000000000" + pose + matrix + "01"},
		{7, agent.Tie{ID: "t", From: msgs.KeyRef{Robot: "r1", Session: 1, ID: 2}, To: msgs.KeyRef{Robot: "r2", Session: 3, ByStamp: true, StampNS: 4},
			Z: quarter, Info: info, Source: "cam", StampNS: 9}, 3,
			"01" + at + "0700000000000000" + "010074" + "02007231" + "01000000" + "0200000000000000" + "00" + "0000000000000000" +
				"02007232" + "03000000" + "0000000000000000" + "01" + "0400000000000000" + pose + matrix + "00" + "030063616d" + "0900000000000000"},
		{0, agent.Sighting{Session: 1, ID: 2, Mark: "m", Sight: sight}, 4,
			"01" + at + "01000000" + "0200000000000000" + "00" + "0000000000000000" + "01006d" + seen},
	} {
		e := entry{8, c.number, c.event}
		if kind, b := e.append(nil); kind != c.kind || hex.EncodeToString(b) != c.want {
			t.Errorf("%T is of kind %d\n%x, want\n%s", c.event, kind, b, c.want)
		}
	}
}

func FuzzDecode(f *testing.F) {
	d := drawn{rand.New(rand.NewPCG(3, 4))}
	for range 20 {
		number, event := d.event()
		e := entry{1, number, event}
		kind, b := e.append(nil)
		f.Add(kind, b)
	}
	f.Fuzz(func(t *testing.T, kind byte, b []byte) {
		e, err := decode(kind, b)
		if err != nil {
			return
		}
		if again, out := e.append(nil); again != kind || !bytes.Equal(out, b) {
			t.Errorf("kind %d: %x reads as %+v, which is written %x", kind, b, e, out)
		}
	})
}
