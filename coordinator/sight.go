package coordinator

import (
	"cmp"
	"math"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/robust"
	"selvage/msgs"
)

// sight is what a tie that is less than a pose measures.
type sight struct {
	sense   posegraph.Sense
	mount   lie.SE3
	spot, z [3]float64
	info    lie.Mat3
	dof     int  // components measured
	sound   bool // its information can be inverted, and is none that cannot be
}

var senses = [...]posegraph.Sense{
	msgs.Position: posegraph.Position, msgs.RangeBearing: posegraph.RangeBearing, msgs.Range: posegraph.Range, msgs.Bearing: posegraph.Bearing,
}

func newSight(m *msgs.Sight) *sight {
	s := &sight{sense: senses[m.Sense], mount: lie.FromQuat(m.Mount.T, m.Mount.Q), spot: m.Spot, z: m.Value, info: m.Info}
	var l [3][3]float64
	s.sound = true
	for i := range 3 { // by Cholesky
		if s.info[4*i] == 0 {
			continue
		}
		s.dof++
		for j := range i + 1 {
			v := s.info[3*i+j]
			for k := range j {
				v -= l[i][k] * l[j][k]
			}
			switch {
			case i == j:
				s.sound = s.sound && v > 1e-14*s.info[4*i] && s.info[4*i] < strongest
				l[i][i] = math.Sqrt(math.Max(v, 0))
			case l[j][j] > 0:
				l[i][j] = v / l[j][j]
			}
		}
	}
	return s
}

// limit is the statistic above which it contradicts a solution.
func (s *sight) limit() float64 { return robust.Limit(s.dof) }

// place returns where it has what it saw, in the frame of the pose that saw, and the variance of that in m^2, the mean over
// the directions; ok is false when it does not tell the place whole.
func (s *sight) place(width int) (at [3]float64, variance float64, ok bool) {
	set := posegraph.New(width, nil).AddEncounters(s.sense)
	set.Add(0, 1, s.mount, s.spot, s.z, &s.info)
	if !s.sound {
		return at, 0, false
	}
	if at, ok = set.Place(0); !ok {
		return at, 0, false
	}
	for i := range 3 {
		if d := s.info[4*i]; d > 0 {
			v := 1 / d
			if s.sense == posegraph.RangeBearing && i > 0 {
				v *= s.z[0] * s.z[0]
			}
			variance += v / float64(s.dof)
		}
	}
	if width == 3 {
		at[2] = 0
	}
	return at, variance, true
}

// alone says why it joins nothing.
func (s *sight) alone() string {
	switch {
	case s.dof == 0:
		return "measures nothing"
	case !s.sound:
		return "claims more than can be measured"
	case s.sense == posegraph.Range:
		return "a range fits two maps that nothing else joins in many ways; sightings with range and bearing at several places, marks that both have seen, or a whole pose would settle it"
	case s.sense == posegraph.Bearing:
		return "a bearing fits two maps that nothing else joins in many ways; sightings with range and bearing at several places, marks that both have seen, or a whole pose would settle it"
	}
	return "nothing held connects its two robots"
}

// sighting returns the batch that tie i belongs to, nil for a whole pose.
func (j *joint) sighting(i int) *posegraph.Sightings {
	s := j.n.ties[i].sight
	if s == nil {
		return nil
	}
	if j.sights[s.sense] == nil {
		j.sights[s.sense] = j.graph.AddEncounters(s.sense)
	}
	return j.sights[s.sense]
}

// add enters tie i between two variables.
func (j *joint) add(i int, from, to int32) {
	t := &j.n.ties[i]
	if set := j.sighting(i); set != nil {
		j.factor[i] = set.Len()
		set.Add(from, to, t.sight.mount, t.sight.spot, t.sight.z, &t.sight.info)
		return
	}
	j.factor[i] = j.ties.Len()
	j.ties.Add(from, to, t.z, &t.info)
}

func (j *joint) weight(i int) float64 {
	if set := j.sighting(i); set != nil {
		return set.W[j.factor[i]]
	}
	return j.ties.W[j.factor[i]]
}

func (j *joint) setWeight(i int, w float64) {
	if set := j.sighting(i); set != nil {
		set.W[j.factor[i]] = w
		return
	}
	j.ties.W[j.factor[i]] = w
}

// chi2 is the misclosure of tie i in the joint solution.
func (j *joint) chi2(i int) float64 {
	if set := j.sighting(i); set != nil {
		return set.Chi2(j.factor[i], &j.graph.Values)
	}
	return j.ties.Chi2(j.factor[i], &j.graph.Values)
}

// innovation is how far tie i, which has no say, lies from what the others predict.
func (j *joint) innovation(i int, sigma posegraph.Covariance) float64 {
	if set := j.sighting(i); set != nil {
		return set.Innovation(j.factor[i], &j.graph.Values, sigma)
	}
	return j.ties.Innovation(j.factor[i], &j.graph.Values, sigma, &j.n.ties[i].cov)
}

// limit returns the statistic above which tie i contradicts the joint solution, and its degrees of freedom.
func (c *Coordinator) limitOf(t *tie) (limit float64, dof int) {
	if t.sight != nil {
		return t.sight.limit(), t.sight.dof
	}
	return c.limit, c.width()
}

// pauseNS ends a meeting: whoever is seen again after it has to be recognised again.
const pauseNS = 10 * second

// meetings numbers the meetings of robots that ties which are less than a pose tell of, tie by tie: between two units a meeting goes on
// while there is no pause between sightings, and neither drives far without one.
func (n *network) meetings(apartM float64) []int {
	type seen struct {
		pair   [2]int
		travel [2]float64
		ns     int64
		tie    int
	}
	var all []seen
	for i := range n.ties {
		if t := &n.ties[i]; t.sight != nil {
			from, to := &n.units[t.from].part.Junctions[t.fromNode], &n.units[t.to].part.Junctions[t.toNode]
			s := seen{[2]int{t.from, t.to}, [2]float64{from.TravelM, to.TravelM}, to.StampNS, i}
			if t.from > t.to {
				s.pair[0], s.pair[1] = s.pair[1], s.pair[0]
				s.travel[0], s.travel[1] = s.travel[1], s.travel[0]
			}
			all = append(all, s)
		}
	}
	slices.SortStableFunc(all, func(a, b seen) int {
		return cmp.Or(slices.Compare(a.pair[:], b.pair[:]), cmp.Compare(a.travel[0], b.travel[0]), cmp.Compare(a.travel[1], b.travel[1]))
	})
	out := make([]int, len(n.ties))
	number := 0
	for k := range all {
		if k > 0 {
			a, b := &all[k-1], &all[k]
			if a.pair != b.pair || b.travel[0]-a.travel[0] > apartM || math.Abs(b.travel[1]-a.travel[1]) > apartM || b.ns-a.ns > pauseNS {
				number++
			}
		}
		out[all[k].tie] = number
	}
	return out
}
