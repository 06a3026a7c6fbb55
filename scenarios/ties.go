package scenarios

import (
	"math"
	"slices"

	"selvage/internal/lie"
)

// sighting is a tie in the making: the far keyframe seen from the near one. The near robot makes it, at its keyframe. Tracks here
// are those of single sessions: what a robot recognises of its own earlier session is a tie too.
type sighting struct {
	from, to       int // tracks
	fromKey, toKey int
	encounter      bool
	pose           lie.SE3
	true, cluster  bool
}

// moment is a keyframe in the order of time.
type moment struct {
	ns         int64
	robot, key int
}

// timeline returns the keyframes of all robots in the order of time, at one time in the order of robots.
func timeline(tracks []*track) []moment {
	var all []moment
	for r, t := range tracks {
		for k, ns := range t.atNS {
			all = append(all, moment{ns, r, k})
		}
	}
	slices.SortFunc(all, func(a, b moment) int {
		switch {
		case a.ns != b.ns && a.ns < b.ns, a.ns == b.ns && a.robot < b.robot:
			return -1
		default:
			return 1
		}
	})
	return all
}

// meet finds the true ties: encounters of two robots, and places that one robot recognises from the track of another.
func meet(sc *Scenario, s *site, tracks []*track, seed uint64) (found []sighting) {
	ties := &sc.Ties
	rng := stream(seed, "ties")
	n := len(tracks)
	seen := newPlaces(ties.RevisitRange, tracks...)
	newest := make([]int, n) // newest keyframe of each robot, -1 before its start
	for r := range newest {
		newest[r] = -1
	}
	ends := make([][]float64, n*n) // travel of robot r at its ties with robot o, at r*n+o
	nearest := make([]int, n)
	best := make([]float64, n)
	encounter, revisit := ties.Encounter.cov(sc.Dimension()), ties.Revisit.cov(sc.Dimension())
	for _, m := range timeline(tracks) {
		r, t := m.robot, tracks[m.robot]
		p := t.pose[m.key].T
		due := func(r, o int, travel float64) bool {
			for _, end := range ends[r*n+o] {
				if math.Abs(travel-end) < ties.Spacing {
					return false
				}
			}
			return true
		}
		offer := func(o, key int, met bool) bool {
			far := tracks[o].travel[key]
			if !due(o, r, far) || !s.sees(p, tracks[o].pose[key].T) {
				return false
			}
			ends[r*n+o], ends[o*n+r] = append(ends[r*n+o], t.travel[m.key]), append(ends[o*n+r], far)
			c := &revisit
			if met {
				c = &encounter
			}
			z := measure(rng, &t.pose[m.key], &tracks[o].pose[key], c)
			if rng.Float64() < ties.Recall {
				found = append(found, sighting{from: r, fromKey: m.key, to: o, toKey: key, encounter: met, pose: z, true: true})
			}
			return true
		}
		for o := range n {
			nearest[o], best[o] = -1, ties.RevisitRange
			if o == r || !due(r, o, t.travel[m.key]) {
				best[o] = -1
				continue
			}
			k := newest[o]
			if k < 0 || k+1 == len(tracks[o].pose) { // not out, or done
				continue
			}
			if d := distance(p, tracks[o].pose[k].T); d <= ties.EncounterRange && d >= 0.5 {
				if offer(o, k, true) {
					best[o] = -1
				}
			}
		}
		for _, cell := range seen.index.around(p) {
			for _, id := range cell {
				o, k := seen.robot[id], seen.key[id]
				if best[o] < 0 || m.ns-tracks[o].atNS[k] < 20e9 {
					continue
				}
				if d := distance(p, tracks[o].pose[k].T); d <= best[o] {
					nearest[o], best[o] = k, d
				}
			}
		}
		for o, k := range nearest {
			if k >= 0 {
				offer(o, k, false)
			}
		}
		seen.enter(t, r, m.key)
		newest[r] = m.key
	}
	return found
}
