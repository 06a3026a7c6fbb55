package scenarios

import (
	"fmt"

	"selvage/internal/survey"
	"selvage/partition"
)

// SplitSurvey cuts the survey of one robot into k connected pieces, each a robot of the result named p01, p02 and so on, with
// its keyframes and the measurements among them; the measurements that were cut become ties. Keyframes keep their ids and poses,
// each piece in a session of its own.
func SplitSurvey(s *survey.Survey, k int, seed uint64) (*survey.Survey, partition.SplitQuality, error) {
	var quality partition.SplitQuality
	if len(s.Robots) != 1 || len(s.Ties) != 0 {
		return nil, quality, fmt.Errorf("the survey has %d robots and %d ties: one robot without ties can be split", len(s.Robots), len(s.Ties))
	}
	r := &s.Robots[0]
	if len(r.Sightings) > 0 {
		return nil, quality, fmt.Errorf("robot %s has %d sightings of marks: a survey without them can be split", r.ID, len(r.Sightings))
	}
	index := make(map[int64]int32, len(r.Keyframes))
	for i := range r.Keyframes {
		if r.Keyframes[i].Session != r.Keyframes[0].Session {
			return nil, quality, fmt.Errorf("robot %s has several sessions: one can be split", r.ID)
		}
		index[r.Keyframes[i].ID] = int32(i)
	}
	edges := make([][2]int32, len(r.Relatives))
	for i := range r.Relatives {
		edges[i] = [2]int32{index[r.Relatives[i].From], index[r.Relatives[i].To]}
	}
	piece, err := partition.Split(len(r.Keyframes), edges, k, seed)
	if err != nil {
		return nil, quality, err
	}
	quality = partition.MeasureSplit(len(r.Keyframes), edges, piece)
	out := &survey.Survey{Meta: s.Meta}
	out.Meta.Name = fmt.Sprintf("%s-in-%d", s.Meta.Name, k)
	out.Meta.Robots = nil
	const session = 1
	for i := 0; i < k; i++ {
		id := fmt.Sprintf("p%02d", i+1)
		out.Meta.Robots = append(out.Meta.Robots, survey.RobotMeta{ID: id, Sessions: []uint32{session}})
		out.Robots = append(out.Robots, survey.Robot{ID: id})
	}
	for i := range r.Keyframes {
		kf := r.Keyframes[i]
		kf.Session = session
		p := &out.Robots[piece[i]]
		p.Keyframes = append(p.Keyframes, kf)
	}
	for i := range r.Relatives {
		m := r.Relatives[i]
		from, to := piece[edges[i][0]], piece[edges[i][1]]
		if from == to {
			m.Session = session
			out.Robots[from].Relatives = append(out.Robots[from].Relatives, m)
			continue
		}
		out.Ties = append(out.Ties, survey.Tie{
			ID: fmt.Sprintf("cut%05d", len(out.Ties)+1), FromRobot: out.Robots[from].ID, FromSession: session, FromKey: m.From,
			ToRobot: out.Robots[to].ID, ToSession: session, ToKey: m.To, Pose: m.Pose, Cov: m.Cov, Source: m.Kind.String(),
		})
	}
	for i := range s.Truth {
		t := s.Truth[i]
		if v, ok := index[t.Key]; ok && !t.ByStamp {
			t.Robot, t.Session = out.Robots[piece[v]].ID, session
			out.Truth = append(out.Truth, t)
		}
	}
	return out, quality, nil
}
