package survey

import (
	"fmt"
	"math"
	"slices"
)

// OdometryNoise is how the error of dead reckoning grows, as a random walk: the variance of a component grows with the way driven and
// the angle turned.
type OdometryNoise struct {
	Forward  float64 // m per root of a metre driven
	Sideways float64 // m per root of a metre driven
	Drift    float64 // rad per root of a metre driven
	Turn     float64 // rad per root of a radian turned
}

// What a robot that stands still is uncertain by, so that no odometry is free of error: m and rad per root of a second.
const standing = 1e-4

// longestPiece is the most that one step of the covariance covers.
const longestPiece = int64(1e8)

// walk is dead reckoning from one keyframe on.
type walk struct {
	x, y, a     float64 // pose in the last keyframe
	p           [3][3]float64
	way, turned float64
	sinceNS     int64
	noise       OdometryNoise
	everyM      float64
	everyRad    float64
	everyNS     int64
}

func (k *walk) restart() {
	k.x, k.y, k.a, k.p, k.way, k.turned, k.sinceNS = 0, 0, 0, [3][3]float64{}, 0, 0, 0
}

// room returns for how long the command may hold until a keyframe is due.
func (k *walk) room(c *command) int64 {
	most := k.everyNS - k.sinceNS
	within := func(left, speed float64) {
		if t := left / math.Abs(speed) * 1e9; t < float64(most) { // false for 0/0
			most = int64(math.Ceil(t))
		}
	}
	within(k.everyM-k.way, c.v)
	within(k.everyRad-k.turned, c.w)
	return most
}

func (k *walk) due() bool {
	return k.way >= k.everyM || k.turned >= k.everyRad || k.sinceNS >= k.everyNS
}

// drive moves along the arc of a command.
func (k *walk) drive(c *command, ns int64) {
	for ns > 0 {
		piece := min(ns, longestPiece)
		k.arc(c, float64(piece)*1e-9)
		k.sinceNS += piece
		ns -= piece
	}
}

func (k *walk) arc(c *command, dt float64) {
	// The arc in the frame where it begins: exact for a constant command.
	turn, way := c.w*dt, c.v*dt
	sinc, cosc := 1-turn*turn/6, turn/2 // sin(turn)/turn, (1-cos(turn))/turn
	if math.Abs(turn) > 1e-4 {
		sinc, cosc = math.Sin(turn)/turn, (1-math.Cos(turn))/turn
	}
	dx, dy := way*sinc, way*cosc
	s, co := math.Sincos(k.a)
	k.x += co*dx - s*dy
	k.y += s*dx + co*dy
	k.a += turn

	// An error (x, y, a) in the frame where the arc begins is R' (x - a dy, y + a dx), a in the frame where it ends.
	s, co = math.Sincos(turn)
	f := [3][3]float64{{co, s, s*dx - co*dy}, {-s, co, s*dy + co*dx}, {0, 0, 1}}
	var fp, p [3][3]float64
	for i := range 3 {
		for j := range 3 {
			for m := range 3 {
				fp[i][j] += f[i][m] * k.p[m][j]
			}
		}
	}
	for i := range 3 {
		for j := range 3 {
			for m := range 3 {
				p[i][j] += fp[i][m] * f[j][m]
			}
		}
	}
	way, turn = math.Abs(way), math.Abs(turn)
	n := &k.noise
	p[0][0] += n.Forward*n.Forward*way + standing*standing*dt
	p[1][1] += n.Sideways*n.Sideways*way + standing*standing*dt
	p[2][2] += n.Drift*n.Drift*way + n.Turn*n.Turn*turn + standing*standing*dt
	k.p = p
	k.way += way
	k.turned += turn
}

// cov returns the uncertainty of the pose in the last keyframe.
func (k *walk) cov() (c Cov) {
	inf := math.Inf(1)
	c.Sigma = [6]float64{math.Sqrt(k.p[0][0]), math.Sqrt(k.p[1][1]), inf, inf, inf, math.Sqrt(k.p[2][2])}
	c.Corr[0] = k.p[0][1] / (c.Sigma[0] * c.Sigma[1]) // x_y
	c.Corr[4] = k.p[0][2] / (c.Sigma[0] * c.Sigma[5]) // x_rz
	c.Corr[8] = k.p[1][2] / (c.Sigma[1] * c.Sigma[5]) // y_rz
	return c
}

// planarPose is a pose in the plane.
func planarPose(x, y, a float64) Pose {
	s, c := math.Sincos(a / 2)
	return Pose{T: [3]float64{x, y}, Q: [4]float64{2: s, 3: c}}
}

// span is when a robot of the log has a track.
type span struct{ fromNS, toNS int64 }

func (s span) holds(ns int64) bool { return s.fromNS <= ns && ns <= s.toNS }

// span returns when the robot has a track: from its first command until the last one takes effect.
func (l *SightingLog) span(robot int, o *SightingLogOptions) span {
	all := l.commands[robot]
	s := span{all[0].atNS, all[len(all)-1].atNS + nanoseconds(o.LagS)}
	s.fromNS = max(s.fromNS, nanoseconds(o.FromS))
	if !math.IsInf(o.ToS, 1) {
		s.toNS = min(s.toNS, nanoseconds(o.ToS))
	}
	return s
}

// track reckons the way of a robot, with keyframes where the spacing asks for one and at the given moments, which are ascending and
// within its span.
func (l *SightingLog) track(robot int, moments []int64, o *SightingLogOptions) (out Robot, err error) {
	out.ID = robotName(robot)
	s := l.span(robot, o)
	if s.fromNS > s.toNS {
		return out, nil
	}
	lag, all := nanoseconds(o.LagS), l.commands[robot]
	next, _ := slices.BinarySearchFunc(all, s.fromNS-lag+1, func(c command, ns int64) int { return cmpNS(c.atNS, ns) })
	now := command{}
	if next > 0 {
		now = all[next-1]
	}
	k := walk{noise: o.Odometry, everyM: o.EveryM, everyRad: o.EveryRad, everyNS: nanoseconds(o.EveryS)}
	var x, y, a float64 // of the last keyframe
	keyframe := func(at int64) {
		id := int64(len(out.Keyframes))
		if id > 0 {
			sin, cos := math.Sincos(a)
			x, y, a = x+cos*k.x-sin*k.y, y+sin*k.x+cos*k.y, math.Remainder(a+k.a, 2*math.Pi)
			out.Relatives = append(out.Relatives, Relative{Session: logSession, From: id - 1, To: id, Pose: planarPose(k.x, k.y, k.a), Cov: k.cov()})
		}
		out.Keyframes = append(out.Keyframes, Keyframe{Session: logSession, ID: id, StampNS: l.originNS + at, HasStamp: true, Pose: planarPose(x, y, a)})
		k.restart()
	}
	keyframe(s.fromNS)
	for at := s.fromNS; at < s.toNS; {
		for next < len(all) && all[next].atNS+lag <= at {
			now = all[next]
			next++
		}
		until := min(s.toNS, at+k.room(&now))
		if next < len(all) {
			until = min(until, all[next].atNS+lag)
		}
		for len(moments) > 0 && moments[0] <= at {
			moments = moments[1:]
		}
		if len(moments) > 0 {
			until = min(until, moments[0])
		}
		k.drive(&now, until-at)
		at = until
		if k.due() || at == s.toNS || len(moments) > 0 && at == moments[0] {
			keyframe(at)
		}
		if len(out.Keyframes) > maxTableRows {
			return out, fmt.Errorf("survey: more than %d keyframes of robot %d, expected them further apart", maxTableRows, robot)
		}
	}
	return out, nil
}

func cmpNS(a, b int64) int {
	switch {
	case a < b:
		return -1
	case a > b:
		return 1
	}
	return 0
}

// at returns the true pose at a moment, between two rows that are not too far apart.
func at(rows []truthRow, ns int64) (Pose, bool) {
	k, exact := slices.BinarySearchFunc(rows, ns, func(r truthRow, ns int64) int { return cmpNS(r.atNS, ns) })
	switch {
	case exact:
		return planarPose(rows[k].x, rows[k].y, rows[k].a), true
	case k == 0 || k == len(rows) || rows[k].atNS-rows[k-1].atNS > longestHole:
		return Pose{}, false
	}
	p, q := &rows[k-1], &rows[k]
	share := float64(ns-p.atNS) / float64(q.atNS-p.atNS)
	return planarPose(p.x+share*(q.x-p.x), p.y+share*(q.y-p.y), p.a+share*math.Remainder(q.a-p.a, 2*math.Pi)), true
}

// longestHole is the longest time without truth across which it is interpolated.
const longestHole = int64(6e8)
