package msgs

import (
	"fmt"
	"math"

	"selvage/msgs/internal/pb"
)

// Target says what a ruling is on.
type Target uint8

// A ruling on a robot or session is on all ties of which an end lies there.
const (
	OnTie Target = iota + 1
	OnRobot
	OnSession
)

// Ruling is what a person has decided on a tie, a robot or a session. It comes before all evidence.
type Ruling struct {
	Fleet     string
	Target    Target
	Robot     string      // the robot ruled on, or the one that measured the tie
	Session   uint32      // with OnSession
	Tie       string      // with OnTie: Tie.ID
	Verdict   VerdictKind // Open withdraws what was ruled before: the evidence decides
	By        string      // who has decided
	Note      string      // why
	StampNS   int64       // when, by the clock of the person's tool
	Signature []byte
}

// On says what the ruling is on: tie T of robot R, robot R, or session N of robot R.
func (x *Ruling) On() string {
	switch x.Target {
	case OnTie:
		return "tie " + x.Tie + " of robot " + x.Robot
	case OnSession:
		return fmt.Sprintf("session %d of robot %s", x.Session, x.Robot)
	}
	return "robot " + x.Robot
}

// Check returns an error, a FieldError, unless the ruling may be sent.
func (x *Ruling) Check() error { return ofKind(KindRule, x.check()) }

func (x *Ruling) check() error {
	if err := checkNames(x.Fleet, x.Robot); err != nil {
		return err
	}
	switch x.Target {
	case OnTie:
		if err := checkID("tie", x.Tie); err != nil {
			return err
		}
	case OnRobot, OnSession:
		if x.Tie != "" {
			return wrong("tie", clip(x.Tie), "none in a ruling on a robot or session")
		}
	default:
		return wrong("target", uint8(x.Target), "1 a tie, 2 a robot or 3 a session")
	}
	if x.Target != OnSession && x.Session != 0 {
		return wrong("session", x.Session, "0 but in a ruling on a session")
	}
	if x.Verdict < Held || x.Verdict > Open {
		return wrong("verdict", uint8(x.Verdict), "1 held, 2 refused or 3 left to the evidence")
	}
	for _, f := range [2]struct {
		name, text string
		most       int
	}{{"by", x.By, MaxID}, {"note", x.Note, MaxNote}} {
		if f.text == "" {
			return wrong(f.name, "none", "at most %d bytes of text without control characters", f.most)
		}
		if err := checkText(f.name, f.text, f.most); err != nil {
			return err
		}
	}
	return checkSignature(x.Signature)
}

// Marshal writes a ruling.
func (x *Ruling) Marshal() ([]byte, error) {
	if err := x.Check(); err != nil {
		return nil, err
	}
	return seal(KindRule, &pb.Ruling{
		Major: Major, Minor: Minor, Fleet: x.Fleet, Target: uint32(x.Target), Robot: x.Robot, Session: x.Session, Tie: x.Tie,
		Verdict: uint32(x.Verdict), By: x.By, Note: x.Note, StampNs: x.StampNS,
	}, x.Signature, MaxSmall)
}

// DecodeRuling reads a ruling.
func DecodeRuling(b []byte) (*Ruling, error) {
	var m pb.Ruling
	if err := open(KindRule, b, &m, MaxSmall, 0); err != nil {
		return nil, err
	}
	x := &Ruling{
		Fleet: m.Fleet, Target: Target(min(m.Target, math.MaxUint8)), Robot: m.Robot, Session: m.Session, Tie: m.Tie,
		Verdict: VerdictKind(min(m.Verdict, math.MaxUint8)), By: m.By, Note: m.Note, StampNS: m.StampNs, Signature: m.Signature,
	}
	return checked(KindRule, x, nil, x.check)
}
