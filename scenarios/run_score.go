package scenarios

import (
	"math"

	"selvage/internal/posegraph"
	"selvage/msgs"
)

// Score is what a rehearsal came to: the content of results/summary.json, see SUMMARY.md. A figure that could not be computed is
// null there and nil here.
type Score struct {
	// Version of this layout: 1.
	Format int `json:"format"`
	// Name of the survey.
	Name string `json:"name"`
	// Whether every check in acceptance holds.
	Accepted bool `json:"accepted"`
	// The acceptance figures.
	Acceptance []Check `json:"acceptance"`
	// How far the fleet's own answer lies above the adjustment of the same data in one piece, for the island that is the datum: the
	// difference of the costs F over the larger of 1 and the cost in one piece. Null unless sessions were joined and the run came to
	// its end.
	GapRelative *float64 `json:"gap_relative"`
	// Solutions of the coordinator after the last measurement had been delivered.
	Rounds int `json:"rounds"`
	// Epoch of the coordinator's last solution; 0 when there was none.
	Epoch uint64 `json:"epoch"`
	// Whether the fleet came to rest: nothing left to send, to answer or to solve.
	Settled bool `json:"settled"`
	// Whether the run was stopped before its end.
	Interrupted bool `json:"interrupted"`
	// Time at the end of the run, s from the start of the outing, on the real bus from the start of the run.
	End float64 `json:"end_s"`
	// Whether true poses are known.
	Truth bool `json:"truth"`
	// Bytes that all robots sent, subjects included.
	BytesUp int `json:"bytes_up"`
	// Bytes that the base sent to all robots, subjects included.
	BytesDown int `json:"bytes_down"`
	// Bytes of the raw graphs of all robots.
	BytesRaw int `json:"bytes_raw"`
	// Messages refused by their receiver.
	Refusals int `json:"refusals"`
	// The robots, in the order of the survey.
	Robots []RobotScore `json:"robots"`
	// The ties measured before the run ended, counted by truth and verdict.
	Ties TieScore `json:"ties"`
	// Ties whose verdict changed after the first one.
	TiesChanged int `json:"ties_changed"`
	// Of them those that were held once and are held no more.
	TiesLost int `json:"ties_lost"`
	// The loop closures delivered before the run ended, counted by truth and verdict. Their own agents judge them.
	Closures TieScore `json:"closures"`
	// Sets of two and more sessions that share a datum; the first is the map's datum.
	Islands []IslandScore `json:"islands"`
}

// Check is one acceptance figure.
type Check struct {
	// What is checked: gap, settled, false_ties_held, false_closures_held, largest_summary or bytes_up.
	Name string `json:"name"`
	// The rule in words.
	Rule string `json:"rule"`
	// What was reached; for settled 1 means yes.
	Value *float64 `json:"value"`
	// What is accepted: for settled at least this, for all others at most this.
	Limit float64 `json:"limit"`
	// Whether it holds.
	OK bool `json:"ok"`
}

// RobotScore is what a rehearsal came to for one robot.
type RobotScore struct {
	// Its name.
	ID string `json:"id"`
	// Keyframes in its map.
	Keyframes int `json:"keyframes"`
	// Whether it shares the map's datum with another robot; where there is one robot only, whether its sessions share one.
	Joined bool `json:"joined"`
	// Bytes it sent, subjects included.
	BytesUp int `json:"bytes_up"`
	// Bytes of its largest summary, subject included.
	BytesUpLargest int `json:"bytes_up_largest"`
	// Bytes of its raw graph: 58 for each keyframe, 144 for each relative pose and for each tie that it measured.
	BytesRaw int `json:"bytes_raw"`
	// Bytes the base sent to it, subjects included.
	BytesDown int `json:"bytes_down"`
	// Summaries it sent.
	Summaries int `json:"summaries"`
	// Root mean square error of its positions against truth, m: its own graph adjusted without ties, each connected part of it moved
	// onto the truth by itself. Null without truth.
	AteAlone *float64 `json:"ate_alone_m"`
	// The same for its part of the fleet's map, all robots of its island moved onto the truth by one rigid motion. Null without
	// truth and for a robot that shares no datum with another.
	AteTeam *float64 `json:"ate_team_m"`
	// Its loop closures by verdict of its agent.
	Closures Verdicts `json:"closures"`
}

// TieScore counts ties, or loop closures.
type TieScore struct {
	// All of them.
	All Verdicts `json:"all"`
	// Those that are true; null when nobody knows.
	True *Verdicts `json:"true"`
	// Those that are false; null when nobody knows.
	False *Verdicts `json:"false"`
}

// Verdicts counts ties, or loop closures, by verdict.
type Verdicts struct {
	// In the solution.
	Held int `json:"held"`
	// Contradicted by the rest.
	Refused int `json:"refused"`
	// Not enough evidence either way.
	Open int `json:"open"`
	// Never reached the base; of loop closures none.
	Unheard int `json:"unheard"`
}

// IslandScore is one set of sessions that share a datum.
type IslandScore struct {
	// The session whose frame its datum began with.
	Island string `json:"island"`
	// Its robots.
	Robots []string `json:"robots"`
	// F at the robots' own final poses.
	Fleet *float64 `json:"cost_fleet"`
	// F of the adjustment in one piece over the same held ties.
	Whole *float64 `json:"cost_one_piece"`
	// As gap_relative above, for this island.
	GapRelative *float64 `json:"gap_relative"`
}

// The acceptance limits.
const (
	gapLimit     = 1e-9 // of the cost in one piece
	largestLimit = 0.1  // of the raw graph
	bytesLimit   = 1.0  // of the raw graph
)

// Score compares the run with the truth, with the adjustment in one piece and with the acceptance limits. It changes nothing.
func (r *Run) Score() (*Score, error) {
	s := r.Outing.Survey
	t := newTruthIndex(s)
	out := &Score{
		Format: 1, Name: s.Meta.Name, Rounds: r.Rounds, Epoch: r.Coordinator.Epoch().Number, Settled: r.Settled, Interrupted: r.Interrupted,
		End: float64(r.EndNS) / 1e9, Truth: len(t.pose) > 0, Refusals: len(r.Refusals), Islands: []IslandScore{},
	}
	places := r.places()
	common := commonMap(places, len(r.Agents))
	alone, err := r.errorsAlone(t)
	if err != nil {
		return nil, err
	}
	team := r.errorsInTeam(places, t)
	for i, a := range r.Agents {
		traffic := &r.Traffic[i]
		score := RobotScore{
			ID: s.Robots[i].ID, BytesUp: traffic.Up, BytesUpLargest: traffic.LargestSummary, BytesRaw: a.Raw(), BytesDown: traffic.Down,
			Summaries: traffic.Summaries, AteAlone: alone[i], AteTeam: team[i],
		}
		for k := range places {
			if places[k].robot == i {
				score.Keyframes += len(places[k].IDs)
				score.Joined = score.Joined || common && places[k].number == 0
			}
		}
		out.BytesUp += traffic.Up
		out.BytesDown += traffic.Down
		out.BytesRaw += a.Raw()
		out.Robots = append(out.Robots, score)
	}
	if err := r.countTies(&out.Ties, t); err != nil {
		return nil, err
	}
	r.countChanges(out)
	r.countClosures(out)
	if !r.Interrupted { // what had been measured but not yet used would count as a gap
		if err := r.scoreIslands(out, places); err != nil {
			return nil, err
		}
	}
	r.accept(out, len(places) > 1, common)
	out.Accepted = true
	for i := range out.Acceptance {
		out.Accepted = out.Accepted && out.Acceptance[i].OK
	}
	return out, nil
}

// scoreIslands puts the gaps into the score, that of the datum first.
func (r *Run) scoreIslands(out *Score, places []place) error {
	gaps, err := r.gaps()
	if err != nil {
		return err
	}
	datum := ""
	for i := range places {
		if places[i].number == 0 {
			datum = places[i].Island
		}
	}
	for i := range gaps {
		g := &gaps[i]
		island := IslandScore{Island: g.Island, Robots: g.Robots, Fleet: figure(g.Fleet), Whole: figure(g.Whole), GapRelative: figure(g.Relative())}
		if g.Island == datum {
			out.Islands = append([]IslandScore{island}, out.Islands...)
			out.GapRelative = island.GapRelative
		} else {
			out.Islands = append(out.Islands, island)
		}
	}
	return nil
}

// accept holds the score against the limits; several tells whether there is more than one session to join, common whether there is
// a common map.
func (r *Run) accept(s *Score, several, common bool) {
	check := func(name, rule string, value *float64, limit float64, ok bool) {
		s.Acceptance = append(s.Acceptance, Check{name, rule, value, limit, ok})
	}
	settled := 0.0
	if s.Settled {
		settled = 1
	}
	check("settled", "the fleet comes to rest", &settled, 1, s.Settled)
	if several {
		worst := math.Inf(-1) // without an island this is no finite number
		for i := range s.Islands {
			if g := s.Islands[i].GapRelative; g != nil {
				worst = math.Max(worst, *g)
			} else {
				worst = math.NaN()
			}
		}
		value := figure(worst)
		if !common {
			value = nil
		}
		check("gap", "the answer of every island equals the adjustment in one piece: difference of the costs over the larger of 1 and the cost",
			value, gapLimit, value != nil && *value <= gapLimit)
	}
	if s.Ties.False != nil {
		held := float64(s.Ties.False.Held)
		check("false_ties_held", "no false tie is held", &held, 0, held == 0)
	}
	if f := s.Closures.False; f != nil && *f != (Verdicts{}) {
		held := float64(f.Held)
		check("false_closures_held", "no false loop closure is held", &held, 0, held == 0)
	}
	if r.Outing.Link == nil || len(s.Robots) == 0 {
		return
	}
	largest, up := 0.0, 0.0
	for i := range s.Robots {
		x := &s.Robots[i]
		raw := math.Max(float64(x.BytesRaw), 1)
		largest = math.Max(largest, float64(x.BytesUpLargest)/raw)
		up = math.Max(up, float64(x.BytesUp)/raw)
	}
	check("largest_summary", "no summary is larger than a tenth of its robot's raw graph", &largest, largestLimit, largest <= largestLimit)
	check("bytes_up", "no robot sends more bytes than its raw graph has", &up, bytesLimit, up <= bytesLimit)
}

// countTies counts the ties that were measured before the run ended, by truth and verdict.
func (r *Run) countTies(out *TieScore, t *truthIndex) error {
	truth, err := r.tieTruth(t)
	if err != nil {
		return err
	}
	if truth != nil {
		out.True, out.False = &Verdicts{}, &Verdicts{}
	}
	verdict, measured := r.verdicts(), r.measured()
	for i := range r.Outing.Survey.Ties {
		if !measured[i] {
			continue
		}
		v := verdict[r.Outing.Survey.Ties[i].ID].Verdict
		out.All.add(v)
		if truth != nil && truth[i] {
			out.True.add(v)
		} else if truth != nil {
			out.False.add(v)
		}
	}
	return nil
}

func (v *Verdicts) add(verdict msgs.VerdictKind) {
	switch verdict {
	case msgs.Held:
		v.Held++
	case msgs.Refused:
		v.Refused++
	case msgs.Open:
		v.Open++
	default:
		v.Unheard++
	}
}

// tieTruth returns which ties are true, nil when nobody knows.
func (r *Run) tieTruth(t *truthIndex) ([]bool, error) {
	if r.Outing.TieTrue != nil {
		return r.Outing.TieTrue, nil
	}
	return tieTrue(r.Outing.Survey, t)
}

// figure returns x, nil when it is no finite number.
func figure(x float64) *float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil
	}
	return &x
}

// tight are the options of an adjustment that others are compared with.
func tight() posegraph.Options {
	o := posegraph.DefaultOptions()
	o.Tolerance = 1e-14
	return o
}
