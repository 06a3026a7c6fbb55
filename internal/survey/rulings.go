package survey

import (
	"fmt"
	"strconv"
	"time"
)

// Target says what a ruling is on.
type Target uint8

const (
	OnTie Target = iota
	OnRobot
	OnSession
)

var targetNames = [...]string{"tie", "robot", "session"}

// String returns the word that stands in the column target.
func (t Target) String() string {
	if int(t) < len(targetNames) {
		return targetNames[t]
	}
	return "unknown"
}

// RulingVerdict is what a person has decided: a tie is to be held or refused whatever the evidence says, or is free again to be
// judged by the evidence.
type RulingVerdict uint8

const (
	RuledFree RulingVerdict = iota
	RuledHeld
	RuledRefused
)

var rulingNames = [...]string{"free", "held", "refused"}

// String returns the word that stands in the column verdict.
func (v RulingVerdict) String() string {
	if int(v) < len(rulingNames) {
		return rulingNames[v]
	}
	return "unknown"
}

// Ruling is what a person has decided. A ruling on a robot or a session is one on all ties at either end of which it stands; one that
// refuses is also on its sightings of marks.
type Ruling struct {
	Target  Target
	Name    string // of the tie or robot
	Session uint32 // with OnSession
	Verdict RulingVerdict
	By      string    // who has decided
	Note    string    // why
	Time    time.Time // read as UTC
}

// On says what the ruling is on: tie T, robot R, or session N of robot R.
func (m *Ruling) On() string {
	if m.Target == OnSession {
		return fmt.Sprintf("session %d of robot %s", m.Session, m.Name)
	}
	return m.Target.String() + " " + m.Name
}

var rulingColumns = []column{{name: "target"}, {name: "name"}, {name: "session"}, {name: "verdict"}, {name: "by"}, {name: "note"}, {name: "time"}}

const (
	rulingTarget, rulingName, rulingSession, rulingVerdict, rulingBy, rulingNote, rulingTime = 0, 1, 2, 3, 4, 5, 6
)

// Texts of a ruling and their rules.
var noteRule = fmt.Sprintf("one line of printable text, at most %d bytes, not empty", maxNote)

const timeRule = "a time such as 2026-03-31T14:05:00Z (RFC 3339)"

func (r *reader) rulings() error {
	_, err := r.rows(rulingsName, rulingColumns, true, func(t *table) {
		m, session := t.ruling()
		if m == nil {
			return
		}
		r.target(m, session, t.faultAt)
		if !t.bad {
			r.survey.Rulings = append(r.survey.Rulings, *m)
		}
	})
	return err
}

// ruling reads a row; hasSession is whether it has a session if it should. It returns nil where it cannot tell what is ruled on.
func (t *table) ruling() (m *Ruling, hasSession bool) {
	m = &Ruling{Name: string(t.text(rulingName)), By: string(t.text(rulingBy)), Note: string(t.text(rulingNote))}
	if !word(string(t.text(rulingTarget)), targetNames[:], &m.Target) {
		t.faultAt(rulingTarget, t.shown(rulingTarget), "tie, robot or session")
		return nil, false
	}
	if !word(string(t.text(rulingVerdict)), rulingNames[:], &m.Verdict) {
		t.faultAt(rulingVerdict, t.shown(rulingVerdict), "held, refused or free")
	}
	hasSession = true
	if m.Target == OnSession {
		m.Session, hasSession = t.session(rulingSession)
	} else if len(t.text(rulingSession)) > 0 {
		t.faultAt(rulingSession, t.shown(rulingSession), "nothing in a ruling on a "+m.Target.String())
	}
	var err error
	if m.Time, err = time.Parse(time.RFC3339, string(t.text(rulingTime))); err != nil {
		t.faultAt(rulingTime, t.shown(rulingTime), timeRule)
	}
	m.Time = m.Time.UTC()
	m.check(t.faultAt)
	return m, hasSession
}

// word finds text among the names of the values of to.
func word[T ~uint8](text string, names []string, to *T) bool {
	for i, n := range names {
		if n == text {
			*to = T(i)
			return true
		}
	}
	return false
}

// check complains about texts that break the rules.
func (m *Ruling) check(fault func(c int, found, expected string)) {
	if m.By == "" || !validText(m.By) {
		fault(rulingBy, quote(m.By), textRule+", not empty")
	}
	if m.Note == "" || len(m.Note) > maxNote || !validNote(m.Note) {
		fault(rulingNote, quote(m.Note), noteRule)
	}
}

// KeepsRulings returns an error unless all rulings in the folder dir are among those of s, nil for none: who replaces the folder with
// s loses nothing that a person has decided.
func KeepsRulings(dir string, s *Survey) error {
	var r reader
	r.root = dir
	known := make(map[string]bool)
	if s != nil {
		for i := range s.Rulings {
			known[fmt.Sprint(s.Rulings[i].fields())] = true
		}
	}
	lost := 0
	_, err := r.rows(rulingsName, rulingColumns, true, func(t *table) {
		if m, _ := t.ruling(); m == nil || t.bad || !known[fmt.Sprint(m.fields())] {
			lost++
		}
	})
	if err != nil {
		return err
	}
	if lost > 0 || r.sink.Total > 0 {
		return fmt.Errorf("survey: %s holds %s with what a person has decided, which would be lost, expected a survey without it or another folder", dir, rulingsName)
	}
	return nil
}

// target complains unless what is ruled on exists. Without session only the robot is looked at.
func (r *reader) target(m *Ruling, session bool, fault func(c int, found, expected string)) {
	if m.Target == OnTie {
		if r.tieNames != nil && !r.tieNames[m.Name] {
			fault(rulingName, quote(m.Name), "a tie that "+tiesName+" lists")
		}
		return
	}
	if _, listed := r.keys[m.Name]; !listed {
		fault(rulingName, quote(m.Name), "a robot that "+metaName+" lists")
	} else if m.Target == OnSession && session && !r.units[unit{m.Name, m.Session}] {
		fault(rulingSession, formatSession(m.Session), "a session of robot "+m.Name+" that "+metaName+" lists")
	}
}

func formatSession(s uint32) string { return strconv.FormatUint(uint64(s), 10) }

// TieRulings returns the ruling that counts for each tie, in the order of Ties; nil for one that is left to the evidence. The last
// ruling on a target counts, and a free one withdraws those before it. A ruling on the tie itself comes before one on a session
// or robot of its ends, see [Survey.UnitRuling]; where those of its two ends differ, the one that refuses counts.
func (s *Survey) TieRulings() []*Ruling {
	out := make([]*Ruling, len(s.Ties))
	if len(s.Rulings) == 0 {
		return out
	}
	onTie := make(map[string]*Ruling)
	for i := range s.Rulings {
		if r := &s.Rulings[i]; r.Target == OnTie {
			onTie[r.Name] = r
		}
	}
	units := make(map[unit]*Ruling)
	ruling := func(robot string, session uint32) *Ruling {
		u := unit{robot, session}
		r, known := units[u]
		if !known {
			r = s.UnitRuling(robot, session)
			units[u] = r
		}
		return r
	}
	for i := range s.Ties {
		t := &s.Ties[i]
		if r := onTie[t.ID]; r != nil && r.Verdict != RuledFree {
			out[i] = r
			continue
		}
		out[i] = ruling(t.FromRobot, t.FromSession)
		if far := ruling(t.ToRobot, t.ToSession); out[i] == nil || far != nil && far.Verdict == RuledRefused {
			out[i] = far
		}
	}
	return out
}

// UnitRuling returns the ruling that counts for a session of a robot: the last one on the session or, when there is none or it is
// free, the last one on the robot. It is nil when that is free too.
func (s *Survey) UnitRuling(robot string, session uint32) *Ruling {
	var onRobot, onSession *Ruling
	for i := range s.Rulings {
		switch r := &s.Rulings[i]; {
		case r.Name != robot:
		case r.Target == OnRobot:
			onRobot = r
		case r.Target == OnSession && r.Session == session:
			onSession = r
		}
	}
	for _, r := range [2]*Ruling{onSession, onRobot} {
		if r != nil && r.Verdict != RuledFree {
			return r
		}
	}
	return nil
}
