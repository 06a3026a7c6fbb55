package agent

import (
	"errors"
	"fmt"

	"selvage/msgs"
)

// tick sends what is due.
func (a *Agent) tick(nowNS int64) ([]Publish, error) {
	var out []Publish
	for i := a.safe; i < a.newest; i++ {
		r := &a.records[i]
		if nowNS-r.sentNS >= a.cfg.RetryNS<<min(r.tries, 4) {
			r.sentNS = nowNS
			r.tries++
			out = append(out, Publish{msgs.KindTie, r.payload, r.number})
		}
	}
	var refused error
	switch {
	case a.due(nowNS):
		var payload []byte
		payload, refused = a.summarise()
		a.sentNS = nowNS
		if payload == nil {
			break
		}
		a.payload, a.answered, a.tries = payload, false, 0
		a.rawAtSend, a.wanted, a.relinear = a.rawNow, false, false
		out = append(out, Publish{msgs.KindSummary, payload, a.version})
	case a.payload != nil && !a.answered && nowNS-a.sentNS >= a.cfg.AnswerNS<<min(a.tries, 4):
		a.tries++
		a.sentNS = nowNS
		out = append(out, Publish{msgs.KindSummary, a.payload, a.version})
	}
	for _, s := range a.sessions {
		if s.stale(nowNS-a.lastNS >= a.cfg.SettleNS) {
			refused = errors.Join(refused, s.refresh())
		}
	}
	if a.beatDue || nowNS-a.beatNS >= a.cfg.HeartbeatNS {
		beat, err := a.heartbeat(nowNS)
		if err != nil {
			return out, errors.Join(refused, err)
		}
		a.beatNS, a.beatDue = nowNS, false
		out = append(out, Publish{Kind: msgs.KindHeartbeat, Payload: beat})
	}
	return out, refused
}

// due tells whether a new summary is to be made now.
func (a *Agent) due(nowNS int64) bool {
	bound, changed := false, a.wanted
	for _, s := range a.sessions {
		if s.bound() {
			bound = true
			changed = changed || s.dirty
		} else if s.news() {
			bound, changed = true, true
		}
	}
	if !bound || !changed && !a.relinear {
		return false
	}
	if a.sentNS == never {
		return true
	}
	if nowNS-a.sentNS < a.cfg.PublishNS {
		return false
	}
	if nowNS-a.lastNS >= a.cfg.SettleNS {
		return true
	}
	return a.payload == nil || changed && float64(len(a.payload)) <= a.cfg.TrafficShare*float64(a.rawNow-a.rawAtSend)
}

func (a *Agent) heartbeat(nowNS int64) ([]byte, error) {
	state := "apart"
	for _, s := range a.sessions {
		if s.joined {
			state = "joined"
		}
	}
	h := msgs.Heartbeat{
		Header: a.header(0, a.latestSession()), NewestNumber: a.newest, Applied: a.applied, SummaryVersion: a.version,
		HighestIncarnation: a.incarnation, State: state, StampNS: nowNS,
	}
	return h.Marshal()
}

// message takes a message from the base. Old, repeated and unknown ones change nothing.
func (a *Agent) message(nowNS int64, m Message) ([]Publish, error) {
	switch m.Kind {
	case msgs.KindWant:
		w, err := msgs.DecodeWant(m.Payload)
		if err != nil {
			return nil, err
		}
		return a.want(nowNS, w)
	case msgs.KindCorrection:
		c, err := msgs.DecodeCorrection(m.Payload)
		if err != nil {
			return nil, err
		}
		return nil, a.correct(c)
	case msgs.KindVerdict:
		_, err := msgs.DecodeVerdict(m.Payload)
		return nil, err
	}
	return nil, fmt.Errorf("message of kind %q: expected want, corr or verdict", m.Kind)
}

// addressed refuses what is meant for somebody else, and lower lease terms.
func (a *Agent) addressed(fleet, robot string, term uint64) error {
	if fleet != a.cfg.Fleet || robot != a.cfg.Robot {
		return fmt.Errorf("message for %s of fleet %s reached %s of fleet %s", robot, fleet, a.cfg.Robot, a.cfg.Fleet)
	}
	if term < a.term {
		return fmt.Errorf("message of lease term %d, after term %d", term, a.term)
	}
	a.term = term
	return nil
}

// met notes the incarnation of a base. A higher one than that of the base before has an empty store: nothing is safe there, and
// it has no summary.
func (a *Agent) met(incarnation uint64) {
	if incarnation <= a.incarnation {
		return
	}
	if a.incarnation > 0 {
		a.safe = 0
		a.wanted = a.wanted || a.payload != nil
	}
	a.incarnation = incarnation
	a.beatDue = true
}

// want takes what the base asks for: separators, missing records, and the number below which records are safe.
func (a *Agent) want(nowNS int64, w *msgs.Want) ([]Publish, error) {
	if err := a.addressed(w.Fleet, w.Robot, w.Term); err != nil {
		return nil, err
	}
	a.met(w.Epoch.Incarnation)
	for i := range w.Keys {
		a.separate(&w.Keys[i], false)
	}
	for _, name := range w.Marks {
		for _, s := range a.sessions {
			a.wanted = s.want(name) || a.wanted
		}
	}
	if w.Journal != a.cfg.Journal || w.Epoch.Incarnation < a.incarnation {
		return nil, nil // it counts in another journal, or speaks for a store that is gone
	}
	a.safe = max(a.safe, min(w.Safe, a.newest))
	var out []Publish
	for _, gap := range w.Gaps {
		for n := max(gap[0], a.safe+1); n <= min(gap[1], a.newest); n++ {
			if r := &a.records[n-1]; nowNS-r.sentNS >= a.cfg.RetryNS/2 {
				r.sentNS = nowNS
				out = append(out, Publish{msgs.KindTie, r.payload, r.number})
			}
		}
	}
	return out, nil
}
