package record

import (
	"fmt"

	"selvage/agent"
	"selvage/internal/posegraph"
	"selvage/msgs"
)

// Kinds of records.
const (
	kindKeyframe = 1
	kindRelative = 2
	kindTie      = 3
	kindSighting = 4
	kindBegin    = 255
)

const version = 1 // of every kind

// entry is an event that an agent has taken.
type entry struct {
	atNS   int64
	number uint64 // of a tie
	event  agent.Event
}

// append writes the entry. It is for events of the front end.
func (e *entry) append(dst []byte) (kind byte, b []byte) {
	w := writer{dst}
	w.byte(version)
	w.int64(e.atNS)
	switch x := e.event.(type) {
	case agent.Keyframe:
		w.uint32(x.Session)
		w.int64(x.ID)
		w.int64(x.StampNS)
		w.pose(&x.Pose)
		return kindKeyframe, w.b
	case agent.Relative:
		w.uint32(x.Session)
		w.int64(x.From)
		w.int64(x.To)
		w.pose(&x.Z)
		w.matrix(x.Info[:], 6)
		w.bool(x.Closure)
		return kindRelative, w.b
	case agent.Tie:
		w.uint64(e.number)
		w.text(x.ID)
		w.ref(&x.From)
		w.ref(&x.To)
		w.pose(&x.Z)
		w.matrix(x.Info[:], 6)
		w.bool(x.Sight != nil)
		if x.Sight != nil {
			w.sight(x.Sight)
		}
		w.text(x.Source)
		w.int64(x.StampNS)
		return kindTie, w.b
	case agent.Sighting:
		w.uint32(x.Session)
		w.int64(x.ID)
		w.bool(x.ByStamp)
		w.int64(x.StampNS)
		w.text(x.Mark)
		w.sight(&x.Sight)
		return kindSighting, w.b
	}
	panic(fmt.Sprintf("record: event of type %T", e.event))
}

func (w *writer) ref(k *msgs.KeyRef) {
	w.text(k.Robot)
	w.uint32(k.Session)
	w.int64(k.ID)
	w.bool(k.ByStamp)
	w.int64(k.StampNS)
}

func (w *writer) sight(s *agent.Sight) {
	w.byte(byte(s.Sense))
	w.sparse(s.Value[:])
	w.matrix(s.Info[:], 3)
	w.pose(&s.Mount)
	w.sparse(s.Spot[:])
}

// decode reads an entry.
func decode(kind byte, b []byte) (e entry, err error) {
	r := reader{b: b}
	r.version(version)
	e.atNS = r.int64()
	switch kind {
	case kindKeyframe:
		var x agent.Keyframe
		x.Session, x.ID, x.StampNS = r.uint32(), r.int64(), r.int64()
		r.pose(&x.Pose)
		e.event = x
	case kindRelative:
		var x agent.Relative
		x.Session, x.From, x.To = r.uint32(), r.int64(), r.int64()
		r.pose(&x.Z)
		r.matrix(x.Info[:], 6)
		x.Closure = r.bool()
		e.event = x
	case kindTie:
		var x agent.Tie
		e.number = r.uint64()
		x.ID = r.text()
		r.ref(&x.From)
		r.ref(&x.To)
		r.pose(&x.Z)
		r.matrix(x.Info[:], 6)
		if r.bool() {
			x.Sight = new(agent.Sight)
			r.sight(x.Sight)
		}
		x.Source, x.StampNS = r.text(), r.int64()
		e.event = x
	case kindSighting:
		var x agent.Sighting
		x.Session, x.ID, x.ByStamp, x.StampNS, x.Mark = r.uint32(), r.int64(), r.bool(), r.int64(), r.text()
		r.sight(&x.Sight)
		e.event = x
	default:
		return entry{}, fmt.Errorf("record of kind %d: no such kind is known", kind)
	}
	if r.err == nil && len(r.b) > 0 {
		r.fail(fmt.Errorf("%d bytes too many", len(r.b)))
	}
	if r.err != nil {
		return entry{}, fmt.Errorf("record of kind %d: %w", kind, r.err)
	}
	return e, nil
}

func (r *reader) ref(k *msgs.KeyRef) {
	k.Robot, k.Session, k.ID, k.ByStamp, k.StampNS = r.text(), r.uint32(), r.int64(), r.bool(), r.int64()
}

func (r *reader) sight(s *agent.Sight) {
	s.Sense = posegraph.Sense(r.byte())
	r.sparse(s.Value[:])
	r.matrix(s.Info[:], 3)
	r.pose(&s.Mount)
	r.sparse(s.Spot[:])
}

// appendState writes a state: version 1 and six numbers.
func appendState(dst []byte, s agent.State) []byte {
	w := writer{dst}
	w.byte(version)
	for _, v := range [6]uint64{s.Incarnation, s.Term, s.Applied.Incarnation, s.Applied.Number, s.Version, s.Safe} {
		w.uint64(v)
	}
	return w.b
}

func decodeState(b []byte) (s agent.State, err error) {
	r := reader{b: b}
	r.version(version)
	for _, v := range [6]*uint64{&s.Incarnation, &s.Term, &s.Applied.Incarnation, &s.Applied.Number, &s.Version, &s.Safe} {
		*v = r.uint64()
	}
	if r.err == nil && len(r.b) > 0 {
		r.fail(fmt.Errorf("%d bytes too many", len(r.b)))
	}
	return s, r.err
}
