package scenarios

import "math/rand/v2"

// Base is the name of the base as an end of a radio link.
const Base = "base"

// Radio decides what becomes of each message. It is a state machine without a clock: calls come in the order of time. Each
// direction of each pair of ends is a link with a queue and a random stream of its own.
type Radio struct {
	spec     RadioSpec
	seed     uint64
	base     [3]float64
	position func(robot string, ns int64) [3]float64
	links    map[[2]string]*link
}

type link struct {
	rng    *rand.Rand
	freeNS int64 // when the queue is empty
}

// NewRadio returns the radio of a scenario in its world.
func NewRadio(sc *Scenario, w *World, seed uint64) *Radio {
	return &Radio{spec: sc.Radio, seed: seed, base: w.Base, position: w.Position, links: map[[2]string]*link{}}
}

// Up reports whether two ends, robots or [Base], are in reach of each other and neither is in an outage.
func (r *Radio) Up(nowNS int64, a, b string) bool {
	for i := range r.spec.Outages {
		o := &r.spec.Outages[i]
		if nowNS >= seconds(o.From) && nowNS < seconds(o.To) && (o.Robot == allRobots || o.Robot == a || o.Robot == b) {
			return false
		}
	}
	return r.spec.Range == 0 || distance(r.place(nowNS, a), r.place(nowNS, b)) <= r.spec.Range
}

func (r *Radio) place(nowNS int64, end string) [3]float64 {
	if end == Base {
		return r.base
	}
	return r.position(end, nowNS)
}

// Send puts a message on the air and returns when it arrives: never, once, or twice. It takes its turn in the queue of its link
// and is lost when that would take too long, when the link is down as it is sent, or by chance.
func (r *Radio) Send(nowNS int64, from, to string, bytes int) (arriveNS []int64) {
	l := r.links[[2]string{from, to}]
	if l == nil {
		l = &link{rng: stream(r.seed, "radio/"+from+"/"+to)}
		r.links[[2]string{from, to}] = l
	}
	// The same draws for each message, whatever becomes of it: a change of one share leaves the fate of the others alone.
	var u [4]float64
	for i := range u {
		u[i] = l.rng.Float64()
	}
	jitter, again := l.rng.ExpFloat64(), l.rng.ExpFloat64()

	sentNS := max(nowNS, l.freeNS)
	if sentNS-nowNS > seconds(r.spec.Queue) || !r.Up(sentNS, from, to) {
		return nil
	}
	if r.spec.Bandwidth > 0 {
		sentNS += seconds(float64(bytes) / r.spec.Bandwidth)
	}
	l.freeNS = sentNS
	if u[0] < r.spec.Loss {
		return nil
	}
	at := sentNS + seconds(r.spec.Delay+r.spec.Jitter*jitter)
	if u[1] < r.spec.Reordered {
		at += seconds(r.spec.ReorderHold * u[2])
	}
	arriveNS = []int64{at}
	if u[3] < r.spec.Duplicates {
		arriveNS = append(arriveNS, at+seconds(r.spec.Jitter*again)+1)
	}
	return arriveNS
}
