package agent

import (
	"fmt"

	"selvage/msgs"
)

// tick sends what is due.
func (a *Agent) tick(nowNS int64) ([]Publish, error) {
	var out []Publish
	for i := range a.records {
		r := &a.records[i]
		if nowNS-r.sentNS >= a.cfg.RetryNS<<min(r.tries, 4) {
			r.sentNS = nowNS
			r.tries++
			out = append(out, Publish{msgs.KindTie, r.payload, r.number})
		}
	}
	switch {
	case a.due(nowNS):
		payload, err := a.summarise()
		if err != nil {
			return out, err
		}
		a.payload, a.answered, a.tries, a.sentNS = payload, false, 0, nowNS
		a.rawAtSend, a.wanted, a.relinear = a.rawNow, false, false
		out = append(out, Publish{msgs.KindSummary, payload, a.version})
	case a.payload != nil && !a.answered && nowNS-a.sentNS >= a.cfg.AnswerNS<<min(a.tries, 4):
		a.tries++
		a.sentNS = nowNS
		out = append(out, Publish{msgs.KindSummary, a.payload, a.version})
	}
	if a.beatDue || nowNS-a.beatNS >= a.cfg.HeartbeatNS {
		beat, err := a.heartbeat(nowNS)
		if err != nil {
			return out, err
		}
		a.beatNS, a.beatDue = nowNS, false
		out = append(out, Publish{Kind: msgs.KindHeartbeat, Payload: beat})
	}
	return out, nil
}

// due tells whether a new summary is to be made now.
func (a *Agent) due(nowNS int64) bool {
	separators, changed := 0, a.wanted
	for _, s := range a.sessions {
		separators += s.separators
		changed = changed || s.dirty
	}
	if separators == 0 || !changed && !a.relinear {
		return false
	}
	if a.payload == nil {
		return true
	}
	if nowNS-a.sentNS < a.cfg.PublishNS {
		return false
	}
	if nowNS-a.lastNS >= a.cfg.SettleNS {
		return true
	}
	return changed && float64(len(a.payload)) <= a.cfg.TrafficShare*float64(a.rawNow-a.rawAtSend)
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

// want takes what the base asks for: separators, missing records, and the number below which records are safe.
func (a *Agent) want(nowNS int64, w *msgs.Want) ([]Publish, error) {
	if err := a.addressed(w.Fleet, w.Robot, w.Term); err != nil {
		return nil, err
	}
	a.incarnation = max(a.incarnation, w.Epoch.Incarnation)
	for _, k := range w.Keys {
		s := a.session(k.Session)
		if k.ByStamp {
			s.resolve(k.StampNS, func(id int64) { a.separate(s, id) })
			continue
		}
		a.separate(s, k.ID)
	}
	if w.Journal != a.cfg.Journal {
		return nil, nil
	}
	a.safe = max(a.safe, min(w.Safe, a.newest))
	kept := a.records[:0]
	for _, r := range a.records {
		if r.number > a.safe {
			kept = append(kept, r)
		}
	}
	a.records = kept
	var out []Publish
	for _, gap := range w.Gaps {
		for i := range a.records {
			if r := &a.records[i]; r.number >= gap[0] && r.number <= gap[1] && nowNS-r.sentNS >= a.cfg.RetryNS/2 {
				r.sentNS = nowNS
				out = append(out, Publish{msgs.KindTie, r.payload, r.number})
			}
		}
	}
	return out, nil
}
