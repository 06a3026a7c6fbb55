package scenarios

import (
	"cmp"
	"fmt"
	"math/rand/v2"
	"slices"
	"strconv"

	"selvage/internal/survey"
)

// World is a simulated outing.
type World struct {
	// Survey is what the fleet recorded, with the truth.
	Survey *survey.Survey

	// TieTrue says for each tie of the survey whether it is true, Clustered whether it belongs to a cluster of false ties.
	TieTrue   []bool
	Clustered []bool

	// ClosureTrue says for each robot and each of its relative poses whether it is true; only loop closures can be false.
	ClosureTrue [][]bool

	// SightingTrue says for each robot and each of its sightings of marks whether it is of the mark it names.
	SightingTrue [][]bool

	// Feed holds for each robot, in the order of Survey.Robots, what its front end delivers, in the order of time.
	Feed [][]Event

	// Base is where the base stands in the datum, m.
	Base [3]float64

	// EndNS is when the outing is over: nothing is delivered later, and the robots are back at the base.
	EndNS int64

	tracks []track
}

// EventKind says what a front end delivers.
type EventKind uint8

const (
	// KeyframeEvent: Index is a row of Survey.Robots[robot].Keyframes.
	KeyframeEvent EventKind = iota
	// RelativeEvent: Index is a row of Survey.Robots[robot].Relatives. Both keyframes have been delivered before.
	RelativeEvent
	// TieEvent: Index is a row of Survey.Ties, delivered to the robot that made it, after its keyframe there.
	TieEvent
	// SightingEvent: Index is a row of Survey.Robots[robot].Sightings.
	SightingEvent
)

// Event is one delivery.
type Event struct {
	AtNS  int64
	Kind  EventKind
	Index int
}

// Simulate draws the outing of a scenario. The seed of the scenario is not looked at: the caller hands one in.
func Simulate(sc *Scenario, seed uint64) (*World, error) {
	if err := sc.Validate(); err != nil {
		return nil, fmt.Errorf("scenarios: %w", err)
	}
	s := newSite(sc, seed)
	w := &World{Base: s.nodes[s.entrance], tracks: make([]track, sc.Fleet.Robots)}
	if sc.Radio.Base != nil {
		w.Base = *sc.Radio.Base
	}
	homes := s.homes(sc.Fleet.Robots)
	sv := &survey.Survey{Meta: survey.Meta{
		Format: 1, Name: sc.Name, Dimension: sc.Dimension(),
		Datum: survey.Datum{Name: "site", Level: true},
		Notes: fmt.Sprintf("Simulated: %s, seed %d.", sc.Title, seed),
	}}
	w.Survey = sv
	var all []leg
	for i := range w.tracks {
		robot := survey.Robot{ID: robotID(i)}
		meta := survey.RobotMeta{ID: robot.ID}
		w.tracks[i] = s.walk(sc, homes[i], stream(seed, "walk/"+robot.ID))
		var isTrue []bool
		for _, l := range legs(sc, i, &w.tracks[i]) {
			wrong, err := record(sc, &robot, &l, seed)
			if err != nil {
				return nil, fmt.Errorf("scenarios: robot %s: %w", robot.ID, err)
			}
			for len(isTrue) < len(robot.Relatives) {
				isTrue = append(isTrue, len(isTrue) < len(robot.Relatives)-wrong)
			}
			for k := range l.track.pose {
				sv.Truth = append(sv.Truth, survey.TruthPose{Robot: robot.ID, Session: l.session, Key: int64(k), Pose: poseOf(&l.track.pose[k])})
			}
			meta.Sessions = append(meta.Sessions, l.session)
			all = append(all, l)
		}
		sv.Meta.Robots = append(sv.Meta.Robots, meta)
		sv.Robots = append(sv.Robots, robot)
		w.ClosureTrue = append(w.ClosureTrue, isTrue)
	}
	tracks := make([]*track, len(all))
	for i := range all {
		tracks[i] = &all[i].track
	}
	found := meet(sc, s, tracks, seed)
	wrong, err := falsify(sc, s, tracks, len(found), seed)
	if err != nil {
		return nil, fmt.Errorf("scenarios: %w", err)
	}
	w.enterTies(sc, all, append(found, wrong...), seed)
	if sc.Marks.Count > 0 {
		w.enterMarks(sc, s, all, tracks, seed)
	}
	if sc.Marks.Count > 0 || sc.Ties.EncounterKind != "pose" {
		for i := range sv.Meta.Robots {
			sv.Meta.Robots[i].Mounting = mountings(sc.Dimension())
		}
	}
	w.feed(sc, all)
	return w, nil
}

// enterTies writes the ties into the survey, in the order of their making; nothing in a row tells true from false.
func (w *World) enterTies(sc *Scenario, all []leg, found []sighting, seed uint64) {
	made := func(t *sighting) int64 { return all[t.from].track.atNS[t.fromKey] }
	slices.SortStableFunc(found, func(a, b sighting) int {
		return cmp.Or(cmp.Compare(made(&a), made(&b)), cmp.Compare(a.from, b.from), cmp.Compare(a.to, b.to), cmp.Compare(a.toKey, b.toKey))
	})
	encounter, revisit := sc.Ties.Encounter.cov(sc.Dimension()), sc.Ties.Revisit.cov(sc.Dimension())
	rng := stream(seed, "sights")
	for i := range found {
		t := &found[i]
		a, b := &all[t.from], &all[t.to]
		row := survey.Tie{
			ID:        fmt.Sprintf("t%04d", i+1),
			FromRobot: robotID(a.robot), FromSession: a.session, FromKey: int64(t.fromKey),
			ToRobot: robotID(b.robot), ToSession: b.session, ToKey: int64(t.toKey),
			Pose: poseOf(&t.pose), Cov: revisit, Source: "recognition", StampNS: made(t), HasStamp: true,
		}
		if t.encounter {
			row.Cov, row.Source = encounter, "encounter"
		}
		if kind, less := sightKinds[sc.Ties.EncounterKind]; less && t.encounter {
			at := &a.track.pose[t.fromKey]
			row.Kind, row.Pose, row.Cov = kind, survey.Pose{}, survey.Cov{}
			row.Sight = see(rng, at, spotOf(&b.track.pose[t.toKey], sc.Dimension()), kind, sc.Ties.Sight, sc.Dimension())
			row.Sight.Target = beaconMount
			if rng.Float64() < sc.FalseTies.Mistaken {
				t.true = !mistake(rng, all, t, &row)
			}
		}
		w.Survey.Ties = append(w.Survey.Ties, row)
		w.TieTrue = append(w.TieTrue, t.true)
		w.Clustered = append(w.Clustered, t.cluster)
	}
}

// mistake takes the robot seen for another one that is out at that time, if there is one.
func mistake(rng *rand.Rand, all []leg, t *sighting, row *survey.Tie) bool {
	now := all[t.from].track.atNS[t.fromKey]
	type candidate struct{ leg, key int }
	var others []candidate
	for i := range all {
		if all[i].robot == all[t.from].robot || all[i].robot == all[t.to].robot {
			continue
		}
		at := all[i].track.atNS
		if k, _ := slices.BinarySearch(at, now); k > 0 && k < len(at) {
			others = append(others, candidate{i, k})
		}
	}
	if len(others) == 0 {
		return false
	}
	o := others[rng.IntN(len(others))]
	row.ToRobot, row.ToSession, row.ToKey = robotID(all[o.leg].robot), all[o.leg].session, int64(o.key)
	return true
}

// enterMarks writes the marks and what the robots see of them into the survey.
func (w *World) enterMarks(sc *Scenario, s *site, all []leg, tracks []*track, seed uint64) {
	marks := placeMarks(sc, tracks, w.Survey, seed)
	w.SightingTrue = make([][]bool, len(w.Survey.Robots))
	for i := range all {
		l := &all[i]
		w.SightingTrue[l.robot] = append(w.SightingTrue[l.robot], sightMarks(sc, s, &w.Survey.Robots[l.robot], l, marks, seed)...)
	}
}

// feed puts what each front end delivers into the order of time.
func (w *World) feed(sc *Scenario, all []leg) {
	late := seconds(sc.FrontEnd.Latency)
	w.Feed = make([][]Event, len(w.tracks))
	first := make([][]int, len(w.tracks)) // first keyframe of each session
	for i := range all {
		first[all[i].robot] = append(first[all[i].robot], all[i].first)
	}
	for r := range w.Survey.Robots {
		robot, at := &w.Survey.Robots[r], w.tracks[r].atNS
		for k := range robot.Keyframes {
			w.Feed[r] = append(w.Feed[r], Event{at[k], KeyframeEvent, k})
		}
		for i := range robot.Relatives {
			m := &robot.Relatives[i]
			ns := at[first[r][m.Session-1]+int(m.To)]
			if m.Kind == survey.Closure {
				ns += late
			}
			w.Feed[r] = append(w.Feed[r], Event{ns, RelativeEvent, i})
		}
	}
	for i := range w.Survey.Ties {
		t := &w.Survey.Ties[i]
		r, _ := robotNumber(t.FromRobot)
		w.Feed[r] = append(w.Feed[r], Event{t.StampNS + late, TieEvent, i})
	}
	for r := range w.Survey.Robots {
		for i := range w.Survey.Robots[r].Sightings {
			m := &w.Survey.Robots[r].Sightings[i]
			w.Feed[r] = append(w.Feed[r], Event{w.tracks[r].atNS[first[r][m.Session-1]+int(m.Key)] + late, SightingEvent, i})
		}
	}
	w.EndNS = seconds(sc.Duration)
	for _, events := range w.Feed {
		slices.SortFunc(events, func(a, b Event) int {
			return cmp.Or(cmp.Compare(a.AtNS, b.AtNS), cmp.Compare(a.Kind, b.Kind), cmp.Compare(a.Index, b.Index))
		})
		if n := len(events); n > 0 {
			w.EndNS = max(w.EndNS, events[n-1].AtNS)
		}
	}
}

// Position returns where a robot is at a time, in the datum, m: before it starts at its home, after [World.EndNS] back at the
// base. A robot that does not exist is a mistake of the caller.
func (w *World) Position(robot string, ns int64) [3]float64 {
	r, ok := robotNumber(robot)
	if !ok || r >= len(w.tracks) {
		panic("scenarios: no robot named " + robot)
	}
	if ns > w.EndNS {
		return w.Base
	}
	return w.tracks[r].position(ns)
}

func seconds(s float64) int64 { return int64(s * 1e9) }

// allRobots stands for every robot in a scenario file.
const allRobots = "all"

// robotID returns the id of robot i, from 0.
func robotID(i int) string { return fmt.Sprintf("r%02d", i+1) }

// robotNumber is the reverse of robotID.
func robotNumber(id string) (i int, ok bool) {
	if len(id) < 3 || id[0] != 'r' {
		return 0, false
	}
	n, err := strconv.Atoi(id[1:])
	return n - 1, err == nil && n > 0 && robotID(n-1) == id
}

func (sc *Scenario) hasRobot(id string) bool {
	n, ok := robotNumber(id)
	return ok && n < sc.Fleet.Robots
}
