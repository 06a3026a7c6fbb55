package msgs

import (
	"math"
	"unicode"
	"unicode/utf8"
)

// Bounds on what a message may hold. A message beyond one of them is refused, when it is written as when it is read.
const (
	MaxName        = 32      // characters of the name of a fleet or robot
	MaxID          = 128     // characters of the id of a tie, of a holder, a source or an island
	MaxReason      = 512     // bytes of the reason of a verdict
	MaxNote        = 256     // bytes of the note of a ruling
	MaxState       = 64      // bytes of the state of a heartbeat
	MaxParts       = 1 << 10 // sessions in a summary or correction
	MaxJunctions   = 1 << 16 // junctions in a part
	MaxCliques     = 1 << 17 // cliques in a part
	MaxCliqueNodes = 128     // nodes in a clique, and points
	MaxPoints      = 1 << 14 // points in a part; marks that it has seen, and that a want asks for
	MaxResolved    = 1 << 16 // resolved stamps in a part
	MaxKeys        = 1 << 16 // keyframes in a want
	MaxGaps        = 1 << 14 // gaps in a want
	MaxKeyframes   = 1 << 31 // keyframes counted in a part
	MaxMetres      = 1e9     // any coordinate, and the length of a track
	MaxMatrix      = 1e70    // any number of an information or covariance matrix

	MaxSmall      = 1 << 14           // bytes of a heartbeat, tie, verdict, ruling, lease or head
	MaxWant       = 1 << 21           // bytes of a want
	MaxSummary    = 8 << 20           // bytes of a summary
	MaxCorrection = 8<<20 - ChunkSize // bytes of a correction, which must pass through the bus in one piece
)

const signatureSize = 64

const nameRule = "1 to 32 letters, digits, _ or -, the first a letter or digit"

// validName reports whether s names a fleet or a robot.
func validName(s string) bool {
	if s == "" || len(s) > MaxName || s[0] == '_' || s[0] == '-' {
		return false
	}
	for i := range len(s) {
		c := s[i]
		if !(c >= 'a' && c <= 'z' || c >= 'A' && c <= 'Z' || c >= '0' && c <= '9' || c == '_' || c == '-') {
			return false
		}
	}
	return true
}

func checkNames(fleet, robot string) error {
	if !validName(fleet) {
		return wrong("fleet", clip(fleet), nameRule)
	}
	if !validName(robot) {
		return wrong("robot", clip(robot), nameRule)
	}
	return nil
}

func checkID(field, s string) error {
	ok := s != "" && len(s) <= MaxID
	for i := 0; ok && i < len(s); i++ {
		ok = s[i] > ' ' && s[i] < 0x7f
	}
	if !ok {
		return wrong(field, clip(s), "1 to %d visible ASCII characters", MaxID)
	}
	return nil
}

// checkText accepts a line meant for people.
func checkText(field, s string, most int) error {
	ok := len(s) <= most && utf8.ValidString(s)
	for _, r := range s {
		ok = ok && !unicode.IsControl(r)
	}
	if !ok {
		return wrong(field, clip(s), "at most %d bytes of text without control characters", most)
	}
	return nil
}

func checkSignature(s []byte) error {
	if len(s) != 0 && len(s) != signatureSize {
		return wrong("signature", len(s), "0 or %d bytes", signatureSize)
	}
	return nil
}

func checkDim(dim int) error {
	if dim != 3 && dim != 6 {
		return wrong("dim", dim, "3 or 6")
	}
	return nil
}

func checkCount(field string, n, least, most int) error {
	if n < least || n > most {
		return wrong(field, n, "%d to %d of them", least, most)
	}
	return nil
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

func checkFinite(field string, xs ...float64) error {
	for _, x := range xs {
		if !finite(x) {
			return wrong(field, x, "a finite number")
		}
	}
	return nil
}

func checkMatrix(field string, m []float64) error {
	for _, x := range m {
		if !(math.Abs(x) <= MaxMatrix) {
			return wrong(field, x, "a number of at most %g", float64(MaxMatrix))
		}
	}
	return nil
}

func (h *Header) check() error {
	if err := checkNames(h.Fleet, h.Robot); err != nil {
		return in(err, "header")
	}
	return checkSignature(h.Signature)
}

func (k *KeyRef) check() error {
	if !validName(k.Robot) {
		return wrong("robot", clip(k.Robot), nameRule)
	}
	if k.ByStamp && k.ID != 0 {
		return wrong("id", k.ID, "0 in a reference by stamp")
	}
	if !k.ByStamp && k.StampNS != 0 {
		return wrong("stamp_ns", k.StampNS, "0 in a reference by id")
	}
	return nil
}

func (p *Pose) check(dim int) error {
	for _, x := range p.T {
		if !(math.Abs(x) <= MaxMetres) {
			return wrong("pose", x, "a coordinate of at most %g m", float64(MaxMetres))
		}
	}
	n := math.Sqrt(p.Q[0]*p.Q[0] + p.Q[1]*p.Q[1] + p.Q[2]*p.Q[2] + p.Q[3]*p.Q[3])
	if !(math.Abs(n-1) <= 1e-6) {
		return wrong("pose", n, "a quaternion of length 1 to 1e-6")
	}
	if off := max(math.Abs(p.T[2]), math.Abs(p.Q[0]), math.Abs(p.Q[1])); dim == 3 && off > 1e-9 {
		return wrong("pose", off, "no height and no tilt in a planar survey (1e-9)")
	}
	return nil
}

func (x *Heartbeat) check() error {
	if err := x.Header.check(); err != nil {
		return err
	}
	return checkText("state", x.State, MaxState)
}

func (x *Tie) check() error {
	if err := x.Header.check(); err != nil {
		return err
	}
	if x.Header.Number == 0 {
		return wrong("header.number", 0, "a position in the journal, from 1")
	}
	if err := checkID("id", x.ID); err != nil {
		return err
	}
	if err := x.From.check(); err != nil {
		return in(err, "from")
	}
	if err := x.To.check(); err != nil {
		return in(err, "to")
	}
	if x.From == x.To {
		return wrong("to", "the same keyframe as from", "another one")
	}
	if x.From.Robot != x.Header.Robot && x.To.Robot != x.Header.Robot {
		return wrong("from", clip(x.From.Robot), "one end at robot %s, which sends the tie", x.Header.Robot)
	}
	if err := checkDim(x.Dim); err != nil {
		return err
	}
	if err := checkText("source", x.Source, MaxID); err != nil {
		return err
	}
	if x.Sight != nil {
		if x.Pose != (Pose{}) || len(x.Info) > 0 {
			return wrong("sight", "a pose beside it", "one of the two")
		}
		return in(x.Sight.check(x.Dim), "sight")
	}
	if err := x.Pose.check(x.Dim); err != nil {
		return err
	}
	if len(x.Info) != x.Dim*x.Dim {
		return wrong("info", len(x.Info), "%d numbers", x.Dim*x.Dim)
	}
	return checkMatrix("info", x.Info)
}

func (x *Verdict) check() error {
	if err := checkNames(x.Fleet, x.Robot); err != nil {
		return err
	}
	if err := checkID("tie", x.Tie); err != nil {
		return err
	}
	if x.Verdict < Held || x.Verdict > Open {
		return wrong("verdict", uint8(x.Verdict), "1 held, 2 refused or 3 open")
	}
	if err := checkText("reason", x.Reason, MaxReason); err != nil {
		return err
	}
	e := &x.Evidence
	if err := checkFinite("evidence", e.Statistic, e.Limit, e.Margin); err != nil {
		return err
	}
	if err := checkCount("evidence.dof", e.DoF, 0, math.MaxInt32); err != nil {
		return err
	}
	if err := checkCount("evidence.places", e.Places, 0, math.MaxInt32); err != nil {
		return err
	}
	return checkSignature(x.Signature)
}

func (x *Lease) check() error {
	if !validName(x.Fleet) {
		return wrong("fleet", clip(x.Fleet), nameRule)
	}
	if err := checkID("holder", x.Holder); err != nil {
		return err
	}
	return checkSignature(x.Signature)
}

func (x *Want) check() error {
	if err := checkNames(x.Fleet, x.Robot); err != nil {
		return err
	}
	if err := checkCount("keys", len(x.Keys), 0, MaxKeys); err != nil {
		return err
	}
	for i := range x.Keys {
		if err := x.Keys[i].check(); err != nil {
			return at(err, "keys", i)
		}
		if x.Keys[i].Robot != x.Robot {
			return at(wrong("robot", clip(x.Keys[i].Robot), "%s, whom the want is for", x.Robot), "keys", i)
		}
	}
	if err := checkMarks("marks", x.Marks); err != nil {
		return err
	}
	if err := checkCount("gaps", len(x.Gaps), 0, MaxGaps); err != nil {
		return err
	}
	last := x.Safe
	for i, g := range x.Gaps {
		if g[0] <= last || g[1] < g[0] {
			return at(wrong("range", g, "first and last number, above %d", last), "gaps", i)
		}
		last = g[1]
	}
	return checkSignature(x.Signature)
}
