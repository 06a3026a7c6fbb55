package scenarios

import (
	"fmt"
	"math"

	"selvage/internal/lie"
	"selvage/internal/survey"
)

// placeMarks sets the marks of a site along the tracks, within sight of where robots will pass, and writes them into the survey: control
// points first, then check points, then marks whose place nobody knows. It returns where they really are.
func placeMarks(sc *Scenario, tracks []*track, sv *survey.Survey, seed uint64) [][3]float64 {
	m := &sc.Marks
	rng := stream(seed, "marks")
	out := make([][3]float64, m.Count)
	for i := range out {
		t := tracks[rng.IntN(len(tracks))]
		side := lie.Identity()
		side.T = [3]float64{uniform(rng, -1, 1), uniform(rng, 0.5, 1), uniform(rng, 0, 1.5)}
		if rng.IntN(2) == 0 {
			side.T[1] = -side.T[1]
		}
		if sc.Dimension() == 2 {
			side.T[2] = 0
		}
		out[i] = t.pose[rng.IntN(len(t.pose))].Apply(side.T)
		mark := survey.Mark{Name: markName(i)}
		if i < m.Control+m.Check {
			mark.Role = survey.ControlPoint
			if i >= m.Control {
				mark.Role = survey.CheckPoint
			}
			mark.Sigma = survey.Unmeasured
			for c := range sc.Dimension() {
				mark.T[c], mark.Sigma[c] = out[i][c]+m.Surveyed*rng.NormFloat64(), m.Surveyed
			}
		}
		sv.Marks = append(sv.Marks, mark)
	}
	return out
}

func markName(i int) string { return fmt.Sprintf("m%02d", i+1) }

// sightMarks lets the robot of a leg see the marks that it passes, a share of them under another name, and adds the rows. It returns
// which are true.
func sightMarks(sc *Scenario, s *site, r *survey.Robot, l *leg, marks [][3]float64, seed uint64) (isTrue []bool) {
	m := &sc.Marks
	rng := stream(seed, fmt.Sprintf("sightings of marks/%s/%d", r.ID, l.session))
	last := make([]float64, len(marks))
	for i := range last {
		last[i] = math.Inf(-1)
	}
	t := &l.track
	for k := range t.pose {
		for i, p := range marks {
			if distance(t.pose[k].T, p) > m.Range || t.travel[k]-last[i] < m.Spacing || !s.sees(t.pose[k].T, p) {
				continue
			}
			last[i] = t.travel[k]
			kind := sightKinds[m.Kind]
			row := survey.Sighting{Session: l.session, Key: int64(k), Mark: markName(i), Kind: kind, Sight: see(rng, &t.pose[k], p, kind, m.Sight, sc.Dimension())}
			mistaken := rng.Float64() < sc.FalseTies.Mistaken && len(marks) > 1
			if mistaken {
				other := rng.IntN(len(marks) - 1)
				if other >= i {
					other++
				}
				row.Mark = markName(other)
			}
			r.Sightings = append(r.Sightings, row)
			isTrue = append(isTrue, !mistaken)
		}
	}
	return isTrue
}
