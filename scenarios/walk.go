package scenarios

import (
	"math"
	"math/rand/v2"

	"selvage/internal/lie"
)

// track is the true movement of one robot: poses in the datum at its keyframes, with their times and the travel so far.
type track struct {
	pose   []lie.SE3
	atNS   []int64
	travel []float64 // m
}

// position returns where the robot is at a time, on straight lines between keyframes; before the first and after the last
// keyframe it stands still.
func (t *track) position(ns int64) [3]float64 {
	lo, hi := 0, len(t.atNS) // first keyframe after ns
	for lo < hi {
		if mid := (lo + hi) / 2; t.atNS[mid] <= ns {
			lo = mid + 1
		} else {
			hi = mid
		}
	}
	if lo == 0 {
		return t.pose[0].T
	}
	if lo == len(t.atNS) {
		return t.pose[lo-1].T
	}
	a, b := t.atNS[lo-1], t.atNS[lo]
	return between(t.pose[lo-1].T, t.pose[lo].T, float64(ns-a)/float64(b-a))
}

// homes spreads the starting nodes of n robots: each as far as possible from those before, the first at the entrance.
func (s *site) homes(n int) []int {
	near := make([]float64, len(s.nodes))
	for i := range near {
		near[i] = math.Inf(1)
	}
	next := s.entrance
	homes := make([]int, 0, n)
	for len(homes) < n {
		homes = append(homes, next)
		r := s.routesFrom(next, s.lengthOf)
		far := 0
		for i, d := range r.cost {
			near[i] = min(near[i], d)
			if near[i] > near[far] {
				far = i
			}
		}
		next = far
	}
	return homes
}

func (s *site) lengthOf(edge int) float64 { return s.edges[edge].length }

// walk moves one robot from its home until the outing ends.
func (s *site) walk(sc *Scenario, home int, rng *rand.Rand) track {
	f := &sc.Fleet
	start := 1 + uniform(rng, 0, f.StartSpread)
	length := 1.15*(sc.Duration-start)*f.SpeedMax + 10 // rounding corners shortens the way
	line := s.lane(s.errands(home, f.Reach, length, rng), rng)
	return s.drive(sc, line, start, rng)
}

// stretch is a point on the way and half the width of the corridor there.
type stretch struct {
	p    [3]float64
	half float64
}

// errands strings goals together until the way has the given length. Goals lie around the home; corridors that the robot has
// been through are longer in its eyes, so it covers its part of the site and still comes back to places.
func (s *site) errands(home int, reach, length float64, rng *rand.Rand) (way []stretch) {
	homeward := s.routesFrom(home, s.lengthOf).cost
	visits := make([]int, len(s.edges))
	goals := make([]int, len(s.nodes))
	weight := make([]float64, len(s.nodes))
	way = append(way, stretch{s.nodes[home], s.edges[s.at[home][0]].half})
	done := 0.0
	for at := home; done < length; {
		sum := 0.0
		for i, d := range homeward {
			weight[i] = 0
			if i != at && !math.IsInf(d, 1) {
				weight[i] = math.Exp(-d*d/(2*reach*reach))/float64(1+3*goals[i]) + 1e-9
			}
			sum += weight[i]
		}
		goal, draw := -1, sum*rng.Float64()
		for i, w := range weight {
			if w > 0 {
				goal = i
				if draw -= w; draw < 0 {
					break
				}
			}
		}
		goals[goal]++
		r := s.routesFrom(goal, func(k int) float64 { return s.edges[k].length * (1 + 0.6*float64(visits[k])) })
		for at != goal {
			k := r.via[at]
			visits[k]++
			e := &s.edges[k]
			n := len(e.line)
			for i := 1; i < n; i++ {
				p := e.line[i]
				if at == e.b {
					p = e.line[n-1-i]
				}
				way = append(way, stretch{p, e.half})
			}
			done += e.length
			at = e.other(at)
		}
	}
	return way
}

// lane turns a way along centre lines into the line a robot drives: corners rounded, to the right of the middle, wandering a
// little, with a half circle where it turns back.
func (s *site) lane(way []stretch, rng *rand.Rand) []stretch {
	wander := newRipple(rng, 25)
	keep := uniform(rng, 0.15, 0.3)
	mid := smooth(way, func(i int) float64 { return 0.8 * way[i].half })
	line := make([]stretch, 0, len(mid)+len(mid)/8)
	var px, py float64 // direction before
	for i, m := range mid {
		a, b := mid[max(i-1, 0)].p, mid[min(i+1, len(mid)-1)].p
		dx, dy := b[0]-a[0], b[1]-a[1]
		if d := math.Hypot(dx, dy); d > 1e-3 {
			dx, dy = dx/d, dy/d
		} else {
			dx, dy = px, py
		}
		off := m.half * (keep + 0.15*wander.at(float64(i)))
		if i > 0 && dx*px+dy*py < -0.2 { // back: half a circle to the left
			from := math.Atan2(-px, py) // of the right-hand side before
			for k := 1; k < 6; k++ {
				sin, cos := math.Sincos(from + math.Pi*float64(k)/6)
				line = append(line, stretch{[3]float64{m.p[0] + off*cos, m.p[1] + off*sin, m.p[2]}, m.half})
			}
		}
		line = append(line, stretch{[3]float64{m.p[0] + off*dy, m.p[1] - off*dx, m.p[2]}, m.half})
		px, py = dx, dy
	}
	return smooth(line, func(int) float64 { return 0.8 })
}

// smooth averages each point with those up to reach(i) metres before and behind, taking points as a metre apart.
func smooth(way []stretch, reach func(i int) float64) []stretch {
	out := make([]stretch, len(way))
	for i, w := range way {
		r := min(reach(i), float64(i), float64(len(way)-1-i))
		n := int(r)
		edge := r - float64(n) // share of the outermost points
		sum, weight := w.p, 1.0
		add := func(p [3]float64, u float64) {
			for c := range sum {
				sum[c] += u * p[c]
			}
			weight += u
		}
		for k := 1; k <= n; k++ {
			add(way[i-k].p, 1)
			add(way[i+k].p, 1)
		}
		if edge > 0 && i > n && i+n+1 < len(way) {
			add(way[i-n-1].p, edge)
			add(way[i+n+1].p, edge)
		}
		for c := range sum {
			sum[c] /= weight
		}
		out[i] = stretch{sum, w.half}
	}
	return out
}

// drive moves along a line at a varying speed and takes a keyframe at each spacing (give or take a tenth) until the end of the
// outing. The robot looks along the line.
func (s *site) drive(sc *Scenario, line []stretch, start float64, rng *rand.Rand) (t track) {
	f := &sc.Fleet
	pace, rock := newRipple(rng, 60), newRipple(rng, 9)
	along := make([]float64, len(line))
	for i := 1; i < len(line); i++ {
		along[i] = along[i-1] + distance(line[i-1].p, line[i].p)
	}
	seg := 0
	point := func(d float64) [3]float64 {
		for seg > 0 && along[seg] > d {
			seg--
		}
		for seg+2 < len(line) && along[seg+1] <= d {
			seg++
		}
		return between(line[seg].p, line[seg+1].p, (d-along[seg])/max(along[seg+1]-along[seg], 1e-9))
	}
	total := along[len(line)-1]
	tilt := 0.0
	if sc.Dimension() == 3 {
		tilt = 0.03
	}
	yaw := 0.0
	for d, now := 0.6, start; now < sc.Duration && d+0.6 < total; {
		a, p, b := point(d-0.6), point(d), point(d+0.6)
		dx, dy, dz := b[0]-a[0], b[1]-a[1], b[2]-a[2]
		flat := math.Hypot(dx, dy)
		if flat > 0.05 { // on the spot it keeps its heading
			yaw = math.Atan2(dy, dx)
		}
		pitch := -math.Atan2(dz, max(flat, 0.3))
		r := turn(2, yaw)
		if tilt > 0 {
			r = r.Mul(turn(1, pitch+tilt*rock.at(d))).Mul(turn(0, tilt*rock.at(d+500)))
		}
		t.pose = append(t.pose, lie.SE3{R: r, T: p})
		t.atNS = append(t.atNS, int64(math.Round(now*1e9)))
		t.travel = append(t.travel, d-0.6)
		step := f.KeyframeSpacing * uniform(rng, 0.9, 1.1)
		d += step
		now += step / ((f.SpeedMin+f.SpeedMax)/2 + (f.SpeedMax-f.SpeedMin)/2*pace.at(d))
	}
	return t
}

// turn returns the rotation by an angle about axis 0 (x), 1 (y) or 2 (z).
func turn(axis int, angle float64) lie.Mat3 {
	var phi lie.Tangent
	phi[3+axis] = angle
	return lie.Exp(phi).R
}
