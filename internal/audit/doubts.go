package audit

import (
	"fmt"
	"math"
	"slices"

	"selvage/internal/adjust"
	"selvage/internal/survey"
)

// A check point is named when it is off by more than stray times what half of all are off, and there are enough of them to say so. Were
// the differences in x and y normal with one sigma, distances would follow Rayleigh's law, and one in 3·10⁷ would be so large.
const (
	stray      = 5
	strayAmong = 5
)

// doubt names marks of known place that something is wrong with: points that nobody has seen, control points that most of their
// sightings contradict, and check points that are much further off than the others.
func (x *Positions) doubt(p *adjust.Problem, s *survey.Survey) {
	x.unseen(s)
	x.contradicted(p, s)
	x.strays()
}

func (x *Positions) unseen(s *survey.Survey) {
	seen := map[string]bool{}
	for i := range s.Robots {
		for k := range s.Robots[i].Sightings {
			seen[s.Robots[i].Sightings[k].Mark] = true
		}
	}
	for _, role := range []survey.Role{survey.ControlPoint, survey.CheckPoint} {
		var names []string
		for i := range s.Marks {
			if m := &s.Marks[i]; m.Role == role && !seen[m.Name] {
				names = append(names, m.Name)
			}
		}
		if len(names) > 0 {
			x.Doubts = append(x.Doubts, fmt.Sprintf("Nobody has seen %s %s.", plural(len(names), role.String()+" point"), list(names)))
		}
	}
}

// contradicted names the control points in the adjustment of which most sightings are left out; where all are, it lies on its
// coordinates for want of anything else.
func (x *Positions) contradicted(p *adjust.Problem, s *survey.Survey) {
	if p.Apart {
		return
	}
	type tally struct{ cut, all int }
	of := map[string]*tally{}
	for _, e := range p.Sights() {
		if e.Tie >= 0 {
			continue
		}
		name := s.Robots[e.Robot].Sightings[e.Sighting].Mark
		if of[name] == nil {
			of[name] = &tally{}
		}
		of[name].all++
		if e.Set == nil || e.Set.W[e.K] < 0.5 {
			of[name].cut++
		}
	}
	for i := range x.Control {
		c := &x.Control[i]
		if t := of[c.Mark]; t != nil && t.all > 1 && 2*t.cut > t.all {
			agrees := false
			c.Agrees = &agrees
			x.Doubts = append(x.Doubts, fmt.Sprintf("Of control point %s %d of %s are left out, for they contradict its coordinates: that it lies on them here proves nothing.", c.Mark, t.cut, count(t.all, "sighting")))
		}
	}
}

func (x *Positions) strays() {
	var distances []float64
	for i := range x.Check {
		if d := x.Check[i].DistanceM; d != nil {
			distances = append(distances, *d)
		}
	}
	if len(distances) < strayAmong {
		return
	}
	slices.Sort(distances)
	limit := stray * distances[len(distances)/2]
	var off []*Position
	var names []string
	for i := range x.Check {
		if c := &x.Check[i]; c.DistanceM != nil && *c.DistanceM > limit {
			off = append(off, c)
			names = append(names, fmt.Sprintf("%s (%s m)", c.Mark, short(*c.DistanceM)))
		}
	}
	if len(off) == 0 {
		return
	}
	x.Doubts = append(x.Doubts, fmt.Sprintf("The map has %s %s more than %d times as far off as half of all: the name, the coordinates or the map are wrong there.",
		plural(len(off), "check point"), list(names), stray))
	for i, a := range off {
		for _, b := range off[i+1:] {
			if a.liesOn(b) && b.liesOn(a) {
				x.Doubts = append(x.Doubts, fmt.Sprintf("Check points %s and %s each lie where the other was surveyed: they may be exchanged.", a.Mark, b.Mark))
			}
		}
	}
}

// liesOn tells whether the map has a point ten times nearer to the surveyed place of another than to its own.
func (x *Position) liesOn(other *Position) bool {
	d := 0.0
	for c := range x.Off {
		if off := float64(other.Off[c]); !math.IsNaN(off) {
			d = math.Hypot(d, x.At[c]-(other.At[c]-off))
		}
	}
	return x.Island == other.Island && d < *x.DistanceM/10
}
