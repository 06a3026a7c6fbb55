package msgs

import (
	"selvage/msgs/internal/pb"
)

func packHeader(h *Header) *pb.Header {
	return &pb.Header{Fleet: h.Fleet, Robot: h.Robot, Journal: h.Journal[:], Number: h.Number, Session: h.Session}
}

func takeHeader(h *pb.Header, signature []byte) (Header, error) {
	if h == nil {
		return Header{}, wrong("header", "none", "one")
	}
	j, err := takeJournal(h.Journal)
	return Header{Fleet: h.Fleet, Robot: h.Robot, Journal: j, Number: h.Number, Session: h.Session, Signature: signature}, in(err, "header")
}

func takeJournal(b []byte) (JournalID, error) {
	if len(b) != len(JournalID{}) {
		return JournalID{}, wrong("journal", len(b), "%d bytes", len(JournalID{}))
	}
	return JournalID(b), nil
}

func packEpoch(e Epoch) *pb.Epoch {
	if e == (Epoch{}) {
		return nil
	}
	return &pb.Epoch{Incarnation: e.Incarnation, Number: e.Number}
}

func takeEpoch(e *pb.Epoch) Epoch { return Epoch{e.GetIncarnation(), e.GetNumber()} }

func packKey(k *KeyRef) *pb.KeyRef {
	return &pb.KeyRef{Robot: k.Robot, Session: k.Session, ByStamp: k.ByStamp, Id: k.ID, StampNs: k.StampNS}
}

func takeKey(k *pb.KeyRef) KeyRef {
	return KeyRef{Robot: k.GetRobot(), Session: k.GetSession(), ID: k.GetId(), ByStamp: k.GetByStamp(), StampNS: k.GetStampNs()}
}

// checked hands out a decoded message, or the reason why it is refused.
func checked[T any](kind string, x *T, err error, check func() error) (*T, error) {
	if err == nil {
		err = check()
	}
	if err != nil {
		return nil, ofKind(kind, err)
	}
	return x, nil
}

// Marshal writes a heartbeat.
func (x *Heartbeat) Marshal() ([]byte, error) {
	if err := x.check(); err != nil {
		return nil, ofKind(KindHeartbeat, err)
	}
	return seal(KindHeartbeat, &pb.Heartbeat{
		Major: Major, Minor: Minor, Header: packHeader(&x.Header), NewestNumber: x.NewestNumber, Applied: packEpoch(x.Applied),
		SummaryVersion: x.SummaryVersion, HighestIncarnation: x.HighestIncarnation, State: x.State, StampNs: x.StampNS,
	}, x.Header.Signature, MaxSmall)
}

// DecodeHeartbeat reads a heartbeat.
func DecodeHeartbeat(b []byte) (*Heartbeat, error) {
	var m pb.Heartbeat
	if err := open(KindHeartbeat, b, &m, MaxSmall, 0); err != nil {
		return nil, err
	}
	h, err := takeHeader(m.Header, m.Signature)
	x := &Heartbeat{
		Header: h, NewestNumber: m.NewestNumber, Applied: takeEpoch(m.Applied), SummaryVersion: m.SummaryVersion,
		HighestIncarnation: m.HighestIncarnation, State: m.State, StampNS: m.StampNs,
	}
	return checked(KindHeartbeat, x, err, x.check)
}

// Marshal writes a tie.
func (x *Tie) Marshal() ([]byte, error) {
	if err := x.check(); err != nil {
		return nil, ofKind(KindTie, err)
	}
	m := &pb.Tie{
		Major: Major, Minor: Minor, Header: packHeader(&x.Header), Id: x.ID, From: packKey(&x.From), To: packKey(&x.To),
		Dim: uint32(x.Dim), Source: x.Source, StampNs: x.StampNS,
	}
	var err error
	if x.Sight != nil {
		m.Sight, err = packSight(x.Sight)
	} else {
		m.Pose = wholePose(&x.Pose)
		m.Info, err = appendFactor(nil, x.Info, x.Dim)
		err = in(err, "info")
	}
	if err != nil {
		return nil, ofKind(KindTie, err)
	}
	return seal(KindTie, m, x.Header.Signature, MaxSmall)
}

// DecodeTie reads a tie. Its pose comes back bit for bit, its information to rounding.
func DecodeTie(b []byte) (*Tie, error) {
	var m pb.Tie
	if err := open(KindTie, b, &m, MaxSmall, 0); err != nil {
		return nil, err
	}
	h, err := takeHeader(m.Header, m.Signature)
	x := &Tie{
		Header: h, ID: m.Id, From: takeKey(m.From), To: takeKey(m.To), Dim: int(m.Dim), Source: m.Source, StampNS: m.StampNs,
	}
	switch {
	case err != nil:
	case checkDim(x.Dim) != nil:
		err = checkDim(x.Dim)
	case m.Sight != nil && len(m.Pose)+len(m.Info) > 0:
		err = wrong("sight", "a pose beside it", "one of the two")
	case m.Sight != nil:
		x.Sight, err = takeSight(m.Sight)
		err = in(err, "sight")
	case len(m.Pose) != 7:
		err = wrong("pose", len(m.Pose), "7 numbers")
	case len(m.Info) != triangle(x.Dim):
		err = wrong("info", len(m.Info), "%d numbers", triangle(x.Dim))
	default:
		x.Pose = Pose{T: [3]float64(m.Pose), Q: [4]float64(m.Pose[3:])}
		x.Info = make([]float64, x.Dim*x.Dim)
		expand(x.Info, m.Info, x.Dim)
	}
	return checked(KindTie, x, err, x.check)
}

// Marshal writes a verdict.
func (x *Verdict) Marshal() ([]byte, error) {
	if err := x.check(); err != nil {
		return nil, ofKind(KindVerdict, err)
	}
	e := &x.Evidence
	return seal(KindVerdict, &pb.Verdict{
		Major: Major, Minor: Minor, Fleet: x.Fleet, Robot: x.Robot, Tie: x.Tie, Verdict: uint32(x.Verdict), Reason: x.Reason,
		Statistic: e.Statistic, Dof: uint32(e.DoF), Limit: e.Limit, Places: uint32(e.Places), Margin: e.Margin,
		Epoch: packEpoch(x.Epoch), Term: x.Term, StampNs: x.StampNS,
	}, x.Signature, MaxSmall)
}

// DecodeVerdict reads a verdict.
func DecodeVerdict(b []byte) (*Verdict, error) {
	var m pb.Verdict
	if err := open(KindVerdict, b, &m, MaxSmall, 0); err != nil {
		return nil, err
	}
	x := &Verdict{
		Fleet: m.Fleet, Robot: m.Robot, Tie: m.Tie, Verdict: VerdictKind(min(m.Verdict, 255)), Reason: m.Reason,
		Evidence: Evidence{Statistic: m.Statistic, DoF: int(m.Dof), Limit: m.Limit, Places: int(m.Places), Margin: m.Margin},
		Epoch:    takeEpoch(m.Epoch), Term: m.Term, StampNS: m.StampNs, Signature: m.Signature,
	}
	return checked(KindVerdict, x, nil, x.check)
}

// Marshal writes a lease.
func (x *Lease) Marshal() ([]byte, error) {
	if err := x.check(); err != nil {
		return nil, ofKind(KindLease, err)
	}
	return seal(KindLease, &pb.Lease{
		Major: Major, Minor: Minor, Fleet: x.Fleet, Holder: x.Holder, Term: x.Term, Incarnation: x.Incarnation,
	}, x.Signature, MaxSmall)
}

// DecodeLease reads a lease.
func DecodeLease(b []byte) (*Lease, error) {
	var m pb.Lease
	if err := open(KindLease, b, &m, MaxSmall, 0); err != nil {
		return nil, err
	}
	x := &Lease{Fleet: m.Fleet, Holder: m.Holder, Term: m.Term, Incarnation: m.Incarnation, Signature: m.Signature}
	return checked(KindLease, x, nil, x.check)
}

// Marshal writes a want.
func (x *Want) Marshal() ([]byte, error) {
	if err := x.check(); err != nil {
		return nil, ofKind(KindWant, err)
	}
	m := &pb.Want{
		Major: Major, Minor: Minor, Fleet: x.Fleet, Robot: x.Robot, Epoch: packEpoch(x.Epoch), Term: x.Term,
		Safe: x.Safe, Journal: x.Journal[:], PeriodMs: x.PeriodMS, Marks: x.Marks,
	}
	var lastID, lastStamp int64
	for i := range x.Keys {
		k := &x.Keys[i]
		m.KeySessions = append(m.KeySessions, k.Session)
		m.KeyByStamp = append(m.KeyByStamp, k.ByStamp)
		value, last := k.ID, &lastID
		if k.ByStamp {
			value, last = k.StampNS, &lastStamp
		}
		m.KeySteps = append(m.KeySteps, value-*last) // wraps, and so does the sum that undoes it
		*last = value
	}
	var last uint64
	for _, g := range x.Gaps {
		m.GapSteps = append(m.GapSteps, g[0]-last, g[1]-g[0])
		last = g[1]
	}
	return seal(KindWant, m, x.Signature, MaxWant)
}

// DecodeWant reads a want.
func DecodeWant(b []byte) (*Want, error) {
	var m pb.Want
	if err := open(KindWant, b, &m, MaxWant, 0); err != nil {
		return nil, err
	}
	x := &Want{
		Fleet: m.Fleet, Robot: m.Robot, Epoch: takeEpoch(m.Epoch), Term: m.Term, Safe: m.Safe, PeriodMS: m.PeriodMs,
		Signature: m.Signature,
	}
	var err error
	x.Journal, err = takeJournal(m.Journal)
	if err == nil {
		err = x.takeLists(&m)
	}
	return checked(KindWant, x, err, x.check)
}

func (x *Want) takeLists(m *pb.Want) error {
	n := len(m.KeySteps)
	if err := checkCount("keys", n, 0, MaxKeys); err != nil {
		return err
	}
	if len(m.KeySessions) != n || len(m.KeyByStamp) != n {
		return wrong("keys", [3]int{len(m.KeySessions), len(m.KeyByStamp), n}, "as many sessions as flags as steps")
	}
	if n > 0 {
		x.Keys = make([]KeyRef, n)
	}
	var id, stamp int64
	for i, step := range m.KeySteps {
		k := KeyRef{Robot: m.Robot, Session: m.KeySessions[i], ByStamp: m.KeyByStamp[i]}
		if k.ByStamp {
			stamp += step
			k.StampNS = stamp
		} else {
			id += step
			k.ID = id
		}
		x.Keys[i] = k
	}
	if len(m.Marks) > 0 {
		x.Marks = m.Marks
	}
	if len(m.GapSteps)%2 != 0 {
		return wrong("gaps", len(m.GapSteps), "an even number of steps")
	}
	if err := checkCount("gaps", len(m.GapSteps)/2, 0, MaxGaps); err != nil {
		return err
	}
	var last uint64
	for i := 0; i < len(m.GapSteps); i += 2 {
		first := last + m.GapSteps[i]
		last = first + m.GapSteps[i+1]
		x.Gaps = append(x.Gaps, [2]uint64{first, last})
	}
	return nil
}
