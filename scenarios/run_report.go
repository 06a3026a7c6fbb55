package scenarios

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"selvage/internal/report"
	"selvage/internal/survey"
	"selvage/msgs"
)

// page is the report of a rehearsal.
func (r *Run) page(s *Score, places []place, poses [][]survey.ResultPose, made, version string) (report.Page, error) {
	t := newTruthIndex(r.Outing.Survey)
	truth, err := r.tieTruth(t)
	if err != nil {
		return report.Page{}, err
	}
	meta := &r.Outing.Survey.Meta
	return report.Page{
		Title: meta.Name, Kind: "Rehearsal", Made: made, Version: version,
		Finding:   s.Finding(),
		Cautions:  r.cautions(s),
		Attention: r.attention(s, places, truth),
		Plans:     []report.Plan{r.plan(places, poses, t, truth)},
		Charts:    r.charts(s),
		Tables:    slices.Concat([]report.Table{s.robotTable(), s.tieTable()}, s.closureTables(), []report.Table{s.acceptanceTable()}, s.islandTables(), []report.Table{r.doubtTable(truth)}, r.historyTables()),
		Method:    r.method(s),
		Files: []report.File{
			{Name: "summary.json", About: "the figures of this page: acceptance, robots, ties, islands"},
			{Name: "poses.csv", About: "every keyframe in the datum of its island, m and quaternions, with covariances"},
			{Name: "verdicts.csv", About: "every tie with its verdict, the reason and the evidence"},
			{Name: "verdict_history.csv", About: "every change of a verdict, with its time, the solution that brought it and the reason"},
			{Name: "closures.csv", About: "every loop closure with the verdict of its robot's agent, the reason and the evidence"},
			{Name: "datum_from_session.csv", About: "where the frame of every session lies"},
			{Name: "../survey.yaml", About: "what was measured: with robots/, ties.csv and truth.csv the survey behind this page"},
		},
	}, nil
}

// Finding is the result in one sentence.
func (s *Score) Finding() string {
	joined := 0
	for i := range s.Robots {
		if s.Robots[i].Joined {
			joined++
		}
	}
	var b strings.Builder
	switch {
	case s.Interrupted:
		b.WriteString("Interrupted: ")
	case s.Accepted:
		b.WriteString("Accepted: ")
	default:
		b.WriteString("Not accepted: ")
	}
	if joined == 0 && len(s.Robots) == 1 {
		b.WriteString("one robot, and nothing to join it with")
	} else if joined == 0 {
		fmt.Fprintf(&b, "none of %d robots shares a datum with another", len(s.Robots))
	} else if joined == 1 {
		b.WriteString("all sessions of one robot share the datum")
	} else if joined == len(s.Robots) {
		fmt.Fprintf(&b, "all %d robots share the datum", joined)
	} else {
		fmt.Fprintf(&b, "%d of %d robots share the datum", joined, len(s.Robots))
	}
	fmt.Fprintf(&b, "; %s held, %d refused, %d open", countOf(s.Ties.All.Held, "tie"), s.Ties.All.Refused, s.Ties.All.Open)
	if n := s.Ties.All.Unheard; n > 0 {
		fmt.Fprintf(&b, ", %d never reached the base", n)
	}
	if failed := s.failed(); len(failed) > 0 && !s.Interrupted {
		fmt.Fprintf(&b, "; but %s", strings.Join(failed, " and "))
	}
	return b.String() + "."
}

// failed says in words which acceptance figures do not hold.
func (s *Score) failed() []string {
	var out []string
	for i := range s.Acceptance {
		c := &s.Acceptance[i]
		if c.OK {
			continue
		}
		switch c.Name {
		case "settled":
			out = append(out, "the fleet did not come to rest")
		case "gap":
			if c.Value == nil {
				out = append(out, "there is no common map to compare with the adjustment in one piece")
			} else {
				out = append(out, "the fleet's answer lies "+power(*c.Value, 2)+" of the cost above that in one piece")
			}
		case "false_ties_held":
			out = append(out, countOf(int(*c.Value), "false tie")+" held")
		case "largest_summary":
			out = append(out, fmt.Sprintf("a summary took %.3g %% of its robot's raw graph", 100**c.Value))
		case "bytes_up":
			out = append(out, fmt.Sprintf("a robot sent %.3g %% of its raw graph", 100**c.Value))
		}
	}
	return out
}

func (r *Run) cautions(s *Score) []string {
	var out []string
	if s.Interrupted {
		out = append(out, fmt.Sprintf("Stopped by hand after %s: the map is what there was at that moment.", clock(r.EndNS)))
	}
	if r.Outing.Link != nil {
		out = append(out, "Simulated: the figures hold for this scenario and this seed.")
	}
	if r.OnBus {
		out = append(out, "On the real bus, everything measured delivered at once and without the scenario's radio: bytes and rounds differ a little from run to run, the map does not.")
	}
	if e := r.epochs(); strings.Contains(e, " ") {
		out = append(out, "The robots hold corrections of epochs "+e+": their poses together are no map of one moment.")
	}
	if !s.Truth {
		out = append(out, "No truth is known: whether a held tie is true, and how far the map is off, is not told here.")
	}
	return out
}

// attention lists what needs a person's eye, the most urgent first.
func (r *Run) attention(s *Score, places []place, truth []bool) []string {
	var out []string
	verdict := r.verdicts()
	ties := r.Outing.Survey.Ties
	for i := range ties {
		if truth != nil && !truth[i] && verdict[ties[i].ID].Verdict == msgs.Held {
			out = append(out, fmt.Sprintf("Tie %s between %s and %s is held although it is false.", ties[i].ID, ties[i].FromRobot, ties[i].ToRobot))
		}
	}
	if !s.Settled {
		out = append(out, fmt.Sprintf("The fleet had not come to rest at %s: a message or a solution was still due.", clock(r.EndNS)))
	}
	for i := range s.Robots {
		if x := &s.Robots[i]; !x.Joined {
			out = append(out, fmt.Sprintf("%s does not share the datum: %s.", x.ID, r.whyApart(i, places)))
		}
	}
	if names := r.doubted(); len(names) > 0 {
		out = append(out, "Coordinates of control points contradict all else, the worst first: "+strings.Join(names, ", ")+
			". They hold the datum, so the map is bent wherever they are wrong: correct marks.csv, or look at what selvage audit says of them.")
	}
	out = append(out, misled(s)...)
	for _, p := range r.singles() {
		what := "a wrong one would not show"
		if !p.bridge {
			what = "others around it check it"
		}
		out = append(out, fmt.Sprintf("%s and %s are held together by the single tie %s; %s.", p.a, p.b, p.tie, what))
	}
	out = append(out, r.ruled()...)
	out = append(out, r.lost()...)
	out = append(out, r.doubts()...)
	if s.Refusals > 0 {
		out = append(out, fmt.Sprintf("%s refused by the receiver; the first: %s", countOf(s.Refusals, "message"), r.Refusals[0]))
	}
	return out
}

// whyApart says why a robot is not in the datum.
func (r *Run) whyApart(robot int, places []place) string {
	id := r.Outing.Survey.Robots[robot].ID
	var with []string
	for i := range places {
		if places[i].robot != robot {
			continue
		}
		for k := range places {
			other := r.Outing.Survey.Robots[places[k].robot].ID
			if places[k].number == places[i].number && other != id && !slices.Contains(with, other) {
				with = append(with, other)
			}
		}
	}
	if len(with) > 0 {
		return "it forms an island with " + list(with)
	}
	n, heard := 0, 0
	verdict, measured := r.verdicts(), r.measured()
	for i := range r.Outing.Survey.Ties {
		if t := &r.Outing.Survey.Ties[i]; measured[i] && (t.FromRobot == id || t.ToRobot == id) {
			n++
			if verdict[t.ID].Verdict != 0 {
				heard++
			}
		}
	}
	switch {
	case n == 0:
		return "no tie touches it"
	case heard == 0:
		return fmt.Sprintf("none of its %d ties reached the base", n)
	}
	if heard == 1 {
		return "the only tie that touches it is not held"
	}
	return fmt.Sprintf("none of its %d ties is held to a robot of the datum", heard)
}

// doubts lists the open ties, those with one reason together: the reason says what would settle them.
func (r *Run) doubts() []string {
	var order []string
	ids := map[string][]string{}
	unheard := 0
	verdict, measured := r.verdicts(), r.measured()
	for i := range r.Outing.Survey.Ties {
		if !measured[i] {
			continue
		}
		id := r.Outing.Survey.Ties[i].ID
		switch f := verdict[id]; f.Verdict {
		case msgs.Held, msgs.Refused:
		case msgs.Open:
			if ids[f.Reason] == nil {
				order = append(order, f.Reason)
			}
			ids[f.Reason] = append(ids[f.Reason], id)
		default:
			unheard++
		}
	}
	var out []string
	const most = 12 // lines
	left := 0
	for n, reason := range order {
		names := ids[reason]
		if n >= most {
			left += len(names)
			continue
		}
		word := "Tie"
		if len(names) > 1 {
			word = "Ties"
		}
		if len(names) > 6 {
			names = append(slices.Clone(names[:5]), fmt.Sprintf("%d more", len(names)-5))
		}
		out = append(out, fmt.Sprintf("%s %s open: %s.", word, list(names), reason))
	}
	if left > 0 {
		out = append(out, fmt.Sprintf("%s open for other reasons, see the table.", countOf(left, "more tie")))
	}
	if unheard > 0 {
		out = append(out, fmt.Sprintf("%s never reached the base.", count(unheard, "tie")))
	}
	return out
}

// single is a pair of robots that one held tie joins.
type single struct {
	a, b, tie string
	bridge    bool // without it the map falls apart
}

// singles returns the pairs of robots that a single held tie joins, in the order of the ties.
func (r *Run) singles() []single {
	type unit struct {
		robot   string
		session uint32
	}
	type join struct{ a, b unit }
	var held []join
	var ids []string
	count := map[[2]string]int{}
	verdict := r.verdicts()
	pairOf := func(j join) [2]string { return [2]string{min(j.a.robot, j.b.robot), max(j.a.robot, j.b.robot)} }
	for i := range r.Outing.Survey.Ties {
		t := &r.Outing.Survey.Ties[i]
		if verdict[t.ID].Verdict == msgs.Held {
			j := join{unit{t.FromRobot, t.FromSession}, unit{t.ToRobot, t.ToSession}}
			held, ids = append(held, j), append(ids, t.ID)
			count[pairOf(j)]++
		}
	}
	var out []single
	for i, j := range held {
		pair := pairOf(j)
		if count[pair] != 1 {
			continue
		}
		reached := map[unit]bool{j.a: true}
		for grown := true; grown; {
			grown = false
			for k, other := range held {
				if k != i && reached[other.a] != reached[other.b] {
					reached[other.a], reached[other.b] = true, true
					grown = true
				}
			}
		}
		out = append(out, single{pair[0], pair[1], ids[i], !reached[j.b]})
	}
	return out
}

func (r *Run) method(s *Score) []string {
	out := []string{
		"Every robot's agent adjusted its own measurements and sent a condensed summary of them; the coordinator decided on the ties, solved for what the robots share, and sent each robot its correction. The map is the robots' own, after their last correction.",
		"Gap: the cost F = 1/2 sum r' Omega r of all measurements and held ties at the robots' own final poses, compared with the adjustment of the same data in one piece (damped Gauss-Newton from the chordal solution and from the fleet's poses, the lower cost counts), over the larger of 1 and that cost.",
		"Covariances: from the adjustment in one piece over the held ties, relative to the first keyframe of the first robot of each island.",
	}
	if s.Truth {
		out = append(out, "Errors are root mean square distances of keyframe positions from the truth. Alone: the robot's graph adjusted without ties, moved onto the truth by itself. In the team: all robots of an island moved onto the truth by one rigid motion (Horn, Closed-form solution of absolute orientation using unit quaternions, JOSA A 4(4), 1987).")
	}
	out = append(out, "Raw graph: 58 bytes for each keyframe and 144 bytes for each relative pose and each tie measured, what the robot would have sent without condensing. Bytes count messages with their subjects, repeats included.")
	return out
}

// clock writes a time since the start of the outing.
func clock(ns int64) string {
	sec := ns / 1e9
	return fmt.Sprintf("%d h %02d min %02d s", sec/3600, sec/60%60, sec%60)
}

// count writes a number of things.
func count(n int, thing string) string {
	if n == 1 {
		return "1 " + thing
	}
	return fmt.Sprintf("%d %ss", n, thing)
}

// countOf is count with its verb.
func countOf(n int, thing string) string {
	if n == 1 {
		return count(n, thing) + " is"
	}
	return count(n, thing) + " are"
}

// list writes names as in a sentence.
func list(names []string) string {
	if len(names) < 2 {
		return strings.Join(names, "")
	}
	return strings.Join(names[:len(names)-1], ", ") + " and " + names[len(names)-1]
}

// metres writes a length to the millimetre.
func metres(x *float64, reason string) string {
	if x == nil {
		return report.Missing(reason)
	}
	return fmt.Sprintf("%.3f", *x)
}

// kilo writes bytes as kB.
func kilo(bytes int) string { return fmt.Sprintf("%.1f", float64(bytes)/1000) }

// small writes a figure that may be missing: whole numbers as they are, others to three digits, tiny ones with a power of ten.
func small(x *float64, reason string) string {
	switch {
	case x == nil:
		return report.Missing(reason)
	case *x == math.Trunc(*x) && math.Abs(*x) < 1e6:
		return fmt.Sprintf("%.0f", *x)
	case math.Abs(*x) >= 1e-3 && math.Abs(*x) < 1e6:
		return fmt.Sprintf("%.3g", *x)
	}
	return power(*x, 2)
}

// power writes a number with the given digits and a power of ten, as 1.5·10⁻¹¹.
func power(x float64, digits int) string {
	if x == 0 {
		return "0"
	}
	mantissa, exponent, _ := strings.Cut(fmt.Sprintf("%.*e", digits-1, x), "e")
	n, _ := strconv.Atoi(exponent)
	raised := strings.Map(func(r rune) rune {
		if r == '-' {
			return '⁻'
		}
		return []rune("⁰¹²³⁴⁵⁶⁷⁸⁹")[r-'0']
	}, strconv.Itoa(n))
	if mantissa == "1" {
		return "10" + raised
	}
	return mantissa + "·10" + raised
}
