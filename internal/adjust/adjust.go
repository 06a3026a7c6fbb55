// Package adjust solves a whole survey in one piece: every keyframe of every session, all relative poses and the ties that
// are held, in one least-squares adjustment. It is the reference that the fleet's own answer is compared with.
//
// A [Problem] is the survey as a pose graph, with the way back from variables to keyframes. Each island (what measurements and
// held ties connect) keeps its first keyframe where the front end had it; covariances are relative to that keyframe. An island with
// control points enough stands in the datum instead.
//
// Sightings of marks and ties that are less than a pose say nothing of where the frames of two robots stand to each other until
// several are taken together: [Problem.Begin] finds that out, and [Problem.SolveRobust] leaves out what does not fit.
package adjust

import (
	"fmt"
	"slices"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/sparse"
	"selvage/internal/survey"
)

// Key names a keyframe.
type Key struct {
	Robot   string
	Session uint32
	ID      int64
}

// Problem is a survey as a pose graph.
type Problem struct {
	Graph   *posegraph.Graph
	Factors *posegraph.Between
	Keys    []Key         // variable -> keyframe
	Var     map[Key]int32 // keyframe -> variable
	Tie     []int         // tie of the survey -> factor, -1 when it is no whole pose or not in the adjustment
	Ends    [][2]int32    // tie of the survey -> variables of its two ends, -1 where there is none
	Anchors []int32       // the fixed variables: one of each island that no control points hold
	Island  []int32       // variable -> island
	Islands int
	Points  []Point // the points of the graph, which Begin makes; their variables follow those of Keys

	// Apart keeps the control points out of the adjustment, for [Problem.Place] to use them afterwards. It is set before Begin.
	Apart bool

	body     []int32   // pose -> what whole relative poses hold together, mostly a session; nil before a start with sightings
	own      []lie.SE3 // the own map of each body where it was found to stand, before the bodies were adjusted together
	sights   []sighted // sightings of marks and ties that are less than a pose, in the order of the survey
	marks    []survey.Mark
	released []bool // mark of the survey -> its coordinates take no part; nil for none
	placed   []bool // island -> it was placed on its control points; nil before Place

	verticals []vertical

	solver  *posegraph.Solver // nil before the analysis
	workers int               // that it was made for
}

// Start says where an adjustment begins.
type Start string

// The starts: from the measurements alone, rotations first; by chaining measurements; or at the poses of the survey. Auto is the
// first, or the second where the first is not determined.
const (
	Auto    Start = "auto"
	Chordal Start = "chordal"
	Tree    Start = "tree"
	Given   Start = "given"
)

// New builds the pose graph of s with the ties for which held is true; nil holds all. Ties by stamp go to the keyframe at that
// moment, which is made between two others where there is none.
func New(s *survey.Survey, held func(tie int) bool) (*Problem, error) { return build(s, held, false) }

// NewWithEnds is [New], but makes the keyframes at the moments of all ties, so that those that are not held can be tested too.
func NewWithEnds(s *survey.Survey, held func(tie int) bool) (*Problem, error) {
	return build(s, held, true)
}

func build(s *survey.Survey, held func(tie int) bool, ends bool) (*Problem, error) {
	keyframes, factors, byStamp := 0, len(s.Ties), false
	for i := range s.Robots {
		keyframes += len(s.Robots[i].Keyframes)
		factors += len(s.Robots[i].Relatives)
	}
	for k := range s.Ties {
		byStamp = byStamp || s.Ties[k].ToByStamp || s.Ties[k].FromByStamp
	}
	for i := range s.Robots {
		for k := range s.Robots[i].Sightings {
			byStamp = byStamp || s.Robots[i].Sightings[k].ByStamp
		}
	}
	p := &Problem{Keys: make([]Key, 0, keyframes), Var: make(map[Key]int32, keyframes), Tie: make([]int, len(s.Ties)), Ends: make([][2]int32, len(s.Ties))}
	moments := moments{problem: p, tracks: map[Key]*track{}}
	poses := make([]lie.SE3, 0, keyframes)
	for i := range s.Robots {
		r := &s.Robots[i]
		for _, k := range r.Keyframes {
			key := Key{r.ID, k.Session, k.ID}
			p.Var[key] = int32(len(poses))
			if byStamp && k.HasStamp {
				moments.add(Key{Robot: r.ID, Session: k.Session}, k.StampNS, int32(len(poses)))
			}
			p.Keys = append(p.Keys, key)
			poses = append(poses, Pose(k.Pose))
		}
	}
	moments.sort()
	p.Graph = posegraph.New(3*(s.Meta.Dimension-1), poses)
	p.Factors = p.Graph.AddBetween()
	p.Factors.Grow(factors)
	for i := range s.Robots {
		if err := p.addRelatives(&s.Robots[i], s.Meta.Dimension); err != nil {
			return nil, err
		}
	}
	for k := range s.Ties {
		t := &s.Ties[k]
		p.Tie[k], p.Ends[k] = -1, [2]int32{-1, -1}
		out := held != nil && !held(k)
		if out && !ends {
			continue
		}
		from, err := moments.end(t.FromRobot, t.FromSession, t.FromKey, t.FromStampNS, t.FromByStamp)
		if err != nil && !out {
			return nil, fmt.Errorf("tie %s: %w", t.ID, err)
		} else if err != nil {
			continue
		}
		to, err := moments.end(t.ToRobot, t.ToSession, t.ToKey, t.ToStampNS, t.ToByStamp)
		if err != nil && !out {
			return nil, fmt.Errorf("tie %s: %w", t.ID, err)
		} else if err != nil {
			continue
		}
		if p.Ends[k] = [2]int32{from, to}; out {
			continue
		}
		if from == to {
			return nil, fmt.Errorf("tie %s: both ends are keyframe %d of robot %s, session %d", t.ID, t.FromKey, t.FromRobot, t.FromSession)
		}
		if t.Kind != survey.WholePose {
			if err := p.addEncounter(s, k, from, to); err != nil {
				return nil, fmt.Errorf("tie %s: %w", t.ID, err)
			}
			continue
		}
		info, err := t.Cov.Information(s.Meta.Dimension)
		if err != nil {
			return nil, fmt.Errorf("tie %s: %w", t.ID, err)
		}
		p.Tie[k] = p.Factors.Len()
		p.Factors.Add(from, to, Pose(t.Pose), &info)
	}
	if err := p.addSightings(s, &moments); err != nil {
		return nil, err
	}
	p.addVerticals(s)
	p.connect(nil, false)
	return p, nil
}

// addRelatives adds what a robot measured within its sessions.
func (p *Problem) addRelatives(r *survey.Robot, dimension int) error {
	ends := [2]int32{}
	for k := range r.Relatives {
		e := &r.Relatives[k]
		for n, id := range [2]int64{e.From, e.To} {
			key := Key{r.ID, e.Session, id}
			// Keyframes mostly follow each other: look beside the last one before asking the map.
			guess := ends[n] + 1
			if int(guess) >= len(p.Keys) || p.Keys[guess] != key {
				v, ok := p.Var[key]
				if !ok {
					return fmt.Errorf("robot %s, session %d, %d to %d: no keyframe %d", r.ID, e.Session, e.From, e.To, id)
				}
				guess = v
			}
			ends[n] = guess
		}
		if e.From == e.To {
			return fmt.Errorf("robot %s, session %d, %d to %d: both ends are one keyframe", r.ID, e.Session, e.From, e.To)
		}
		info, err := e.Cov.Information(dimension)
		if err != nil {
			return fmt.Errorf("robot %s, session %d, %d to %d: %w", r.ID, e.Session, e.From, e.To, err)
		}
		p.Factors.Add(ends[0], ends[1], Pose(e.Pose), &info)
	}
	return nil
}

// Pose turns a pose of the folder into a rigid motion.
func Pose(p survey.Pose) lie.SE3 { return lie.FromQuat(p.T, p.Q) }

// Folder turns a rigid motion into a pose of the folder.
func Folder(x *lie.SE3) survey.Pose { return survey.Pose{T: x.T, Q: x.Quat()} }

// Begin sets starting values. Where there are sightings it also finds how the frames of the robots stand to each other and
// leaves those that it cannot join in islands of their own.
func (p *Problem) Begin(start Start) error {
	if len(p.sights) > 0 {
		return p.beginSighted(start)
	}
	switch start {
	case Auto:
		given := slices.Clone(p.Graph.Values.Poses)
		if p.chordal() == nil {
			return nil
		}
		copy(p.Graph.Values.Poses, given)
		posegraph.SpanningTree(p.Graph, p.Anchors)
	case Chordal:
		return p.chordal()
	case Tree:
		posegraph.SpanningTree(p.Graph, p.Anchors)
	case Given:
	default:
		return fmt.Errorf("start %q: expected auto, chordal, tree or given", start)
	}
	return nil
}

// chordal makes the chordal start; a planar problem is analysed for it, which serves the adjustment too.
func (p *Problem) chordal() error {
	if p.Graph.Dim != 3 {
		return posegraph.Chordal(p.Graph, p.Anchors)
	}
	if err := p.Analyse(1); err != nil {
		return err
	}
	return p.solver.Chordal()
}

// Analyse orders and analyses the problem for the given number of workers.
func (p *Problem) Analyse(workers int) (err error) {
	if p.solver == nil || p.workers != workers {
		p.workers = workers
		p.solver, err = posegraph.NewSolver(p.Graph, p.Anchors, sparse.Options{Workers: workers})
	}
	return err
}

// Solve adjusts; Analyse must have been called.
func (p *Problem) Solve(o posegraph.Options) posegraph.Result { return p.solver.Optimise(o) }

// Solver returns the solver that Analyse made.
func (p *Problem) Solver() *posegraph.Solver { return p.solver }
