package scenarios

import (
	"fmt"
	"math"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/report"
	"selvage/internal/survey"
	"selvage/msgs"
)

// plan draws the final map: tracks, truth moved into the datum of each island, and the ties whose two ends share one.
func (r *Run) plan(places []place, poses [][]survey.ResultPose, t *truthIndex, truth []bool) report.Plan {
	s := r.Outing.Survey
	p := report.Plan{Title: s.Meta.Name, Datum: s.Meta.Datum.Name, Epoch: r.epochs(), DatumTiedToNorth: s.Meta.Datum.Grid != nil && s.Meta.Datum.Grid.YawRad == 0}
	move := motions(places, t, s.Robots)
	type end struct {
		at     [3]float64
		island int
	}
	where := map[adjust.Key]end{}
	type moment struct {
		stamp int64
		end
	}
	when := map[adjust.Key][]moment{} // by robot and session
	sessions := map[int]int{}
	for i := range places {
		sessions[places[i].robot]++
	}
	for i := range places {
		x := &places[i]
		id := s.Robots[x.robot].ID
		track := report.Track{Robot: id, Hue: x.robot + 1, Island: x.number}
		if sessions[x.robot] > 1 {
			track.Robot = fmt.Sprintf("%s/%d", id, x.Session)
		}
		m, known := move[x.number]
		back := m.Inv()
		for k := range poses[i] {
			q := &poses[i][k]
			key := adjust.Key{Robot: id, Session: q.Session, ID: q.ID}
			where[key] = end{q.Pose.T, x.number}
			if q.HasStamp {
				of := adjust.Key{Robot: id, Session: q.Session}
				when[of] = append(when[of], moment{q.StampNS, where[key]})
			}
			track.Points = append(track.Points, q.Pose.T)
			if known {
				at := [3]float64{math.NaN(), math.NaN(), math.NaN()}
				if y, ok := t.pose[key]; ok {
					at = back.Apply(y.T)
				}
				track.Truth = append(track.Truth, at)
			}
		}
		p.Tracks = append(p.Tracks, track)
		if n := len(poses[i]); n > 0 && x.number == 0 && poses[i][n-1].HasCov {
			p.Ellipses = append(p.Ellipses, ellipse(&poses[i][n-1]))
		}
	}
	// at finds an end of a tie; one that is known by its moment is drawn at the keyframe nearest in time.
	at := func(robot string, session uint32, key, stamp int64, byStamp bool) (end, bool) {
		if !byStamp {
			e, ok := where[adjust.Key{Robot: robot, Session: session, ID: key}]
			return e, ok
		}
		best, least := -1, int64(math.MaxInt64)
		all := when[adjust.Key{Robot: robot, Session: session}]
		for i := range all {
			if d := max(all[i].stamp-stamp, stamp-all[i].stamp); d < least {
				best, least = i, d
			}
		}
		if best < 0 {
			return end{}, false
		}
		return all[best].end, true
	}
	unchecked := map[string]bool{}
	for _, x := range r.singles() {
		unchecked[x.tie] = x.bridge
	}
	verdict, measured := r.verdicts(), r.measured()
	for i := range s.Ties {
		tie := &s.Ties[i]
		a, ok := at(tie.FromRobot, tie.FromSession, tie.FromKey, tie.FromStampNS, tie.FromByStamp)
		b, found := at(tie.ToRobot, tie.ToSession, tie.ToKey, tie.ToStampNS, tie.ToByStamp)
		if !ok || !found || !measured[i] || a.island != b.island {
			continue
		}
		mark := report.TieMark{ID: tie.ID, From: a.at, To: b.at, Island: a.island, Verdict: report.Open, Unchecked: unchecked[tie.ID]}
		switch verdict[tie.ID].Verdict {
		case msgs.Held:
			mark.Verdict = report.Held
		case msgs.Refused:
			mark.Verdict = report.Refused
		}
		if truth != nil {
			mark.True = &truth[i]
		}
		p.Ties = append(p.Ties, mark)
	}
	return p
}

// ellipse turns the covariance of a position, which is in the frame of its keyframe, into that of the datum.
func ellipse(p *survey.ResultPose) report.Ellipse {
	x := adjust.Pose(p.Pose)
	c := lie.Mat3{p.Cov[0], p.Cov[1], p.Cov[2], p.Cov[1], p.Cov[6], p.Cov[7], p.Cov[2], p.Cov[7], p.Cov[11]}
	var out [3]float64
	for n, at := range [3][2]int{{0, 0}, {0, 1}, {1, 1}} {
		for i := range 3 {
			for j := range 3 {
				out[n] += x.R[3*at[0]+i] * c[3*i+j] * x.R[3*at[1]+j]
			}
		}
	}
	return report.Ellipse{At: [2]float64{x.T[0], x.T[1]}, Cov: out}
}
