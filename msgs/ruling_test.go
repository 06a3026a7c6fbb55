package msgs

import (
	"strings"
	"testing"

	"google.golang.org/protobuf/proto"

	"selvage/msgs/internal/pb"
)

func TestRulingRefused(t *testing.T) {
	for _, c := range []struct {
		text  string
		spoil func(x *Ruling)
	}{
		{"rule: fleet: found \"\"", func(x *Ruling) { x.Fleet = "" }},
		{"rule: robot: found \"r.1\"", func(x *Ruling) { x.Robot = "r.1" }},
		{"rule: target: found 0, expected 1 a tie, 2 a robot or 3 a session", func(x *Ruling) { x.Target = 0 }},
		{"rule: target: found 4", func(x *Ruling) { x.Target = 4 }},
		{"rule: tie: found \"\"", func(x *Ruling) { x.Tie = "" }},
		{"rule: tie: found \"a b\"", func(x *Ruling) { x.Tie = "a b" }},
		{"rule: tie: found \"r1.01020304.300\", expected none", func(x *Ruling) { x.Target = OnRobot }},
		{"rule: session: found 3, expected 0", func(x *Ruling) { x.Session = 3 }},
		{"rule: session: found 3, expected 0", func(x *Ruling) { x.Target, x.Tie, x.Session = OnRobot, "", 3 }},
		{"rule: verdict: found 0", func(x *Ruling) { x.Verdict = 0 }},
		{"rule: verdict: found 4", func(x *Ruling) { x.Verdict = 4 }},
		{"rule: by: found none", func(x *Ruling) { x.By = "" }},
		{"rule: by: found \"bbb", func(x *Ruling) { x.By = strings.Repeat("b", MaxID+1) }},
		{"rule: note: found none", func(x *Ruling) { x.Note = "" }},
		{"rule: note: found \"nnn", func(x *Ruling) { x.Note = strings.Repeat("n", MaxNote+1) }},
		{"rule: note: found \"two\\nlines\"", func(x *Ruling) { x.Note = "two\nlines" }},
		{"rule: note: found \"\\xff\"", func(x *Ruling) { x.Note = "\xff" }},
		{"rule: signature: found 1", func(x *Ruling) { x.Signature = []byte{1} }},
	} {
		x := find[Ruling](t, "ruling")
		c.spoil(x)
		_, err := x.Marshal()
		wantError(t, c.text, err, c.text)
		// The reader refuses the same, whoever wrote it.
		b, err := proto.Marshal(&pb.Ruling{
			Major: Major, Fleet: x.Fleet, Target: uint32(x.Target), Robot: x.Robot, Session: x.Session, Tie: x.Tie, Verdict: uint32(x.Verdict),
			By: x.By, Note: x.Note, Signature: x.Signature,
		})
		if err != nil {
			continue // text that is none cannot even be written
		}
		_, err = DecodeRuling(b)
		wantError(t, c.text, err, c.text)
	}
	for _, target := range []uint32{256 + 1, 1<<32 - 1} {
		b, err := proto.Marshal(&pb.Ruling{Major: Major, Fleet: "f", Target: target, Robot: "r", Tie: "t", Verdict: 1, By: "b", Note: "n"})
		if err != nil {
			t.Fatal(err)
		}
		_, err = DecodeRuling(b)
		wantError(t, "target", err, "rule: target: found 255")
	}
	_, err := DecodeRuling(make([]byte, MaxSmall+1))
	wantError(t, "too large", err, "at most")
}
