package scenarios

import (
	"errors"
	"math"
	"math/rand/v2"

	"selvage/internal/lie"
)

// falseCount returns how many false things make the given share of all when there are n true ones.
func falseCount(n int, share float64) int { return int(math.Round(float64(n) * share / (1 - share))) }

// apart draws a keyframe of each of two tracks, the first the later one in time, whose true places are more than gap metres apart.
func apart(rng *rand.Rand, a, b *track, gap float64) (i, j int, ok bool) {
	for range 1000 {
		i, j = rng.IntN(len(a.pose)), rng.IntN(len(b.pose))
		if b.atNS[j] < a.atNS[i] && distance(a.pose[i].T, b.pose[j].T) > gap {
			return i, j, true
		}
	}
	return 0, 0, false
}

// anywhere draws a relative pose as a place matcher might report: near, about level, any heading.
func anywhere(rng *rand.Rand, reach float64, dimension int) lie.SE3 {
	sin, cos := math.Sincos(uniform(rng, 0, 2*math.Pi))
	d := reach * math.Sqrt(rng.Float64())
	x := lie.SE3{R: turn(2, uniform(rng, -math.Pi, math.Pi)), T: [3]float64{d * cos, d * sin, 0}}
	if dimension == 3 {
		x.T[2] = 0.2 * rng.NormFloat64()
		x.R = x.R.Mul(turn(1, 0.03*rng.NormFloat64())).Mul(turn(0, 0.03*rng.NormFloat64()))
	}
	return x
}

// errCramped is returned when false measurements are asked for and no two places are far enough apart.
var errCramped = errors.New("the tracks leave no two places far enough apart for a false tie or closure: expected a larger site, a longer outing or no false ones")

// falsify draws the false ties that make the shares asked for next to n true ones.
func falsify(sc *Scenario, s *site, tracks []*track, n int, seed uint64) (found []sighting, err error) {
	f := &sc.FalseTies
	share := f.Independent + f.Clustered
	if share == 0 {
		return nil, nil
	}
	wrong := falseCount(n, share)
	grouped := int(math.Round(float64(wrong) * f.Clustered / share))
	rng := stream(seed, "false ties/clusters")
	where := make([]*places, len(tracks))
	for r, t := range tracks {
		where[r] = newPlaces(sc.Ties.RevisitRange, t)
		for k := range t.pose {
			where[r].enter(t, r, k)
		}
	}
	for len(found) < grouped {
		size := min(f.ClusterSize, grouped-len(found))
		group := lookAlike(sc, s, tracks, where, size, rng)
		if group == nil {
			break
		}
		found = append(found, group...)
	}
	rng = stream(seed, "false ties/independent")
	for len(found) < wrong { // also what could not be had in clusters
		a, b := twoOf(rng, len(tracks))
		i, j, ok := apart(rng, tracks[a], tracks[b], minGap(sc))
		if !ok {
			a, b = b, a
			if i, j, ok = apart(rng, tracks[a], tracks[b], minGap(sc)); !ok {
				return nil, errCramped
			}
		}
		found = append(found, sighting{from: a, fromKey: i, to: b, toKey: j, pose: anywhere(rng, sc.Ties.RevisitRange, sc.Dimension())})
	}
	return found, nil
}

// minGap is the least true distance of the two ends of a false tie.
func minGap(sc *Scenario) float64 { return max(3*sc.Ties.RevisitRange, 8) }

func twoOf(rng *rand.Rand, n int) (a, b int) {
	a, b = rng.IntN(n), rng.IntN(n-1)
	if b >= a {
		b++
	}
	return a, b
}

// lookAlike draws a cluster: two robots in two places that look the same, with ties that all follow from one wrong motion of
// the one track onto the other. In a site that repeats itself the motion is a shift by whole repeats, and any place that it
// brings together may join; elsewhere the ties follow each other along the corridor. It gives up, with nil, when many draws
// have found no cluster of that size.
func lookAlike(sc *Scenario, s *site, tracks []*track, where []*places, size int, rng *rand.Rand) []sighting {
	for range 400 {
		a, b := twoOf(rng, len(tracks))
		ta, tb := tracks[a], tracks[b]
		i := rng.IntN(len(ta.pose))
		var g lie.SE3 // where the matcher believes what is seen from b, in the datum
		if s.shift > 0 {
			n := float64(1+rng.IntN(4)) * s.shift
			if rng.IntN(2) == 0 {
				n = -n
			}
			g = lie.Identity()
			g.T[0] = n
		} else {
			j := rng.IntN(len(tb.pose))
			if distance(ta.pose[i].T, tb.pose[j].T) < minGap(sc) {
				continue
			}
			z := anywhere(rng, sc.Ties.RevisitRange, sc.Dimension())
			z.R = turn(2, 0.1*rng.NormFloat64()) // a corridor is mistaken for one that runs the same way,
			if rng.IntN(2) == 0 {
				z.R = z.R.Mul(turn(2, math.Pi)) // from either end
			}
			g = ta.pose[i].Mul(z).Mul(tb.pose[j].Inv())
		}
		if group := along(sc, a, b, ta, tb, where[b], i, &g, size, s.shift > 0, rng); group != nil {
			return group
		}
	}
	return nil
}

// along collects the ties of a cluster: from keyframe i of track a onwards, at each spacing, the keyframe of track b that the
// wrong motion g puts nearest.
func along(sc *Scenario, a, b int, ta, tb *track, onB *places, i int, g *lie.SE3, size int, skip bool, rng *rand.Rand) (group []sighting) {
	f := &sc.FalseTies
	c := sc.Ties.Revisit.cov(sc.Dimension())
	gap := minGap(sc)
	if skip {
		gap = 0 // the shift is the error
	}
	back := g.Inv()
	next, missed := ta.travel[i], 0.0
	lastB := math.Inf(1)
	for k := i; k < len(ta.pose) && len(group) < size; k++ {
		if ta.travel[k] < next {
			continue
		}
		j, best := -1, sc.Ties.RevisitRange
		for _, cell := range onB.index.around(back.Apply(ta.pose[k].T)) {
			for _, id := range cell {
				q := onB.key[id]
				away := math.Abs(tb.travel[q] - lastB)
				if away < 0.5*f.ClusterSpacing || !skip && len(group) > 0 && away > 4*f.ClusterSpacing {
					continue
				}
				if d := distance(ta.pose[k].T, g.Apply(tb.pose[q].T)); d < best && distance(ta.pose[k].T, tb.pose[q].T) > gap {
					j, best = q, d
				}
			}
		}
		if j < 0 {
			// Where the site repeats itself the robots part and come together again; elsewhere the likeness ends here.
			if missed += ta.travel[k] - ta.travel[max(k-1, 0)]; !skip && missed > 2*f.ClusterSpacing || missed > 400 {
				return nil
			}
			continue
		}
		missed = 0
		next, lastB = ta.travel[k]+f.ClusterSpacing, tb.travel[j]
		wrong := g.Mul(tb.pose[j])
		t := sighting{from: a, fromKey: k, to: b, toKey: j, cluster: true}
		if t.pose = measure(rng, &ta.pose[k], &wrong, &c); tb.atNS[j] > ta.atNS[k] { // the later robot makes the tie
			t = sighting{from: b, fromKey: j, to: a, toKey: k, cluster: true, pose: measure(rng, &wrong, &ta.pose[k], &c)}
		}
		group = append(group, t)
	}
	if len(group) < size {
		return nil
	}
	return group
}
