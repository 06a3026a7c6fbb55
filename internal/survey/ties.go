package survey

import (
	"fmt"
	"slices"
)

func (r *reader) ties() error {
	seen := make(map[string]bool)
	dim := r.survey.Meta.Dimension
	before, unnamed := r.sink.Total, false
	whole, err := r.rows(tiesName, tieColumns, true, func(t *table) {
		var m Tie
		var ok bool
		m.ID = string(t.text(tieID))
		switch {
		case !validTie(m.ID):
			t.faultAt(tieID, quote(m.ID), tieRule)
			unnamed = true
		case seen[m.ID]:
			t.faultAt(tieID, quote(m.ID)+" a second time", "each id once")
		}
		seen[m.ID] = true
		if m.Kind, ok = t.kind(tieKind, WholePose); !ok {
			return
		}
		var from, to end
		from = r.end(t, tieFromRobot, tieFromSession, tieFromKey, tieFromStamp)
		to = r.end(t, tieToRobot, tieToSession, tieToKey, tieToStamp)
		m.FromRobot, m.FromSession, m.FromKey = from.robot, from.session, from.key
		m.FromStampNS, m.FromByStamp = from.stampNS, from.byStamp
		m.ToRobot, m.ToSession, m.ToKey = to.robot, to.session, to.key
		m.ToStampNS, m.ToByStamp = to.stampNS, to.byStamp
		if from.ok && to.ok && from.unit == to.unit {
			t.faultAt(tieToSession, "both ends in one session", "two robots or two sessions; what lies within one belongs in its "+relativeName)
		}
		if m.Kind == WholePose {
			m.Pose = t.pose(tiePose, dim)
			m.Cov = t.cov(tieCov)
			for _, c := range notOfPose {
				t.none(c, m.Kind)
			}
		} else {
			m.Sight = t.sight(m.Kind, tieSightAt, dim)
			for _, c := range notOfSight {
				t.none(c, m.Kind)
			}
			m.Sight.Sensor = r.mount(t, tieSensor, m.FromRobot, "sensor")
			m.Sight.Target = r.mount(t, tieTarget, m.ToRobot, "target")
		}
		m.Source = string(t.text(tieSource))
		if !validText(m.Source) {
			t.faultAt(tieSource, quote(m.Source), textRule)
		}
		m.StampNS, m.HasStamp = t.stamp(tieStamp)
		if !t.bad {
			r.survey.Ties = append(r.survey.Ties, m)
		}
	})
	if !unnamed && (whole || r.sink.Total == before) { // they can all be told
		r.tieNames = seen
	}
	return err
}

// Columns that a row of one kind of tie leaves empty. A pose is that of base_link in base_link, of a keyframe.
var notOfPose, notOfSight = func() (pose, sight []int) {
	pose = []int{tieFromStamp, tieSensor, tieTarget}
	for c := tiePolar; c < tiePolar+6; c++ {
		pose = append(pose, c)
	}
	for c := tiePose + 3; c < tiePose+7; c++ { // the quaternion
		sight = append(sight, c)
	}
	for c := tieCov + 3; c < tieCov+6; c++ { // the sigmas of a rotation
		sight = append(sight, c)
	}
	for c := tieCov + 6; c < tiePolar; c++ {
		if !slices.Contains(tieSightAt.corr[:], c) {
			sight = append(sight, c)
		}
	}
	return pose, sight
}()

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

// end reads a robot, a session and either a keyframe that exists or a stamp.
func (r *reader) end(t *table, cRobot, cSession, cKey, cStamp int) (e end) {
	e.robot, e.unit.session, e.ok = r.unit(t, cRobot, cSession)
	r.place(t, &e, cKey, cStamp)
	return e
}

// place reads either a keyframe that exists or a stamp into e, of which it has
// robot and session.
func (r *reader) place(t *table, e *end, cKey, cStamp int) {
	hasKey := len(t.text(cKey)) > 0
	hasStamp := len(t.text(cStamp)) > 0
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
}
