package survey

import "fmt"

// tieKinds are the kinds of tie that this version reads.
const tieKinds = "pose"

func (r *reader) ties() error {
	seen := make(map[string]bool)
	dim := r.survey.Meta.Dimension
	_, err := r.rows(tiesName, tieColumns, true, func(t *table) {
		if kind := string(t.text(tieKind)); kind != "pose" {
			t.faultAt(tieKind, quote(kind), "one of the kinds that this version reads: "+tieKinds)
			return
		}
		var m Tie
		m.ID = string(t.text(tieID))
		switch {
		case !validTie(m.ID):
			t.faultAt(tieID, quote(m.ID), tieRule)
		case seen[m.ID]:
			t.faultAt(tieID, quote(m.ID)+" a second time", "each id once")
		}
		seen[m.ID] = true

		var from, to end
		from = r.end(t, tieFromRobot, tieFromSession, tieFromKey, -1)
		to = r.end(t, tieToRobot, tieToSession, tieToKey, tieToStamp)
		m.FromRobot, m.FromSession, m.FromKey = from.robot, from.session, from.key
		m.ToRobot, m.ToSession, m.ToKey = to.robot, to.session, to.key
		m.ToStampNS, m.ToByStamp = to.stampNS, to.byStamp
		if from.ok && to.ok && from.unit == to.unit {
			t.faultAt(tieToSession, "both ends in one session", "two robots or two sessions; what lies within one belongs in its "+relativeName)
		}
		m.Pose = t.pose(tiePose, dim)
		m.Cov = t.cov(tieCov)
		m.Source = string(t.text(tieSource))
		if !validText(m.Source) {
			t.faultAt(tieSource, quote(m.Source), textRule)
		}
		m.StampNS, m.HasStamp = t.stamp(tieStamp)
		if !t.bad {
			r.survey.Ties = append(r.survey.Ties, m)
		}
	})
	return err
}

func (r *reader) truth() error {
	type place struct {
		unit
		at      int64
		byStamp bool
	}
	seen := make(map[place]bool)
	dim := r.survey.Meta.Dimension
	_, err := r.rows(truthName, truthColumns, true, func(t *table) {
		e := r.end(t, truthRobot, truthSession, truthKey, truthStamp)
		p := TruthPose{Robot: e.robot, Session: e.session, Key: e.key, StampNS: e.stampNS, ByStamp: e.byStamp}
		if e.ok {
			at, c := place{e.unit, e.key, false}, truthKey
			if e.byStamp {
				at, c = place{e.unit, e.stampNS, true}, truthStamp
			}
			if seen[at] {
				t.faultAt(c, fmt.Sprintf("%d a second time", at.at), "each pose once")
			}
			seen[at] = true
		}
		p.Pose = t.pose(truthPose, dim)
		if !t.bad {
			r.survey.Truth = append(r.survey.Truth, p)
		}
	})
	return err
}

// end is what a row names: a keyframe or a moment of one session of a robot.
type end struct {
	unit
	key     int64
	stampNS int64
	byStamp bool
	ok      bool // robot and session are listed and the key or stamp is a number
}

// end reads a robot, a session and either a keyframe that exists or, if the
// table has column cStamp, a stamp. cStamp is -1 where only a keyframe will do.
func (r *reader) end(t *table, cRobot, cSession, cKey, cStamp int) (e end) {
	e.robot, e.unit.session, e.ok = r.unit(t, cRobot, cSession)
	hasKey := len(t.text(cKey)) > 0
	hasStamp := cStamp >= 0 && len(t.text(cStamp)) > 0
	number := true
	switch {
	case hasKey && hasStamp:
		t.faultAt(cStamp, quote(string(t.text(cStamp)))+" beside a "+t.columns[cKey].name, "one of the two empty")
		number = false
	case hasStamp:
		e.byStamp = true
		e.stampNS, number = t.int64(cStamp)
	default:
		e.key, number = t.int64(cKey)
		if e.ok && number {
			r.keyframe(t, cKey, e.robot, e.session, e.key)
		}
	}
	e.ok = e.ok && number
	return e
}
