package survey

import (
	"fmt"
	"math"
	"slices"
)

// ResultClosure is the finding on one loop closure. Of those that join the same two keyframes the n-th belongs to the n-th relative
// pose that does.
type ResultClosure struct {
	Robot    string
	Session  uint32
	From, To int64
	Verdict  string // held, refused or open
	Reason   string

	// ChiSquare is the misclosure over its sigma squared, with DoF degrees of freedom, and Threshold what it was held against; NaN in
	// ChiSquare leaves all three fields empty.
	ChiSquare float64
	DoF       int
	Threshold float64
}

var closureColumns = []column{{name: "robot"}, {name: "session"}, {name: "from"}, {name: "to"}, {name: "verdict"}, {name: "reason"},
	{name: "chi_square"}, {name: "dof"}, {name: "threshold", optional: true}}

const closuresName = resultsName + "/closures.csv"

// WriteClosures writes results/closures.csv into the survey folder dir, complete or not at all; it begins with a comment line, "# "
// and note.
func WriteClosures(dir string, all []ResultClosure, note string) error {
	if !validNote(note) {
		return fmt.Errorf("survey: note %s, expected one line of printable text", quote(note))
	}
	var w csvWriter
	w.comment(note)
	w.header(closureColumns, nil)
	for i := range all {
		c := &all[i]
		if !validRobot(c.Robot) || !validVerdict(c.Verdict) || !validNote(c.Reason) {
			return fmt.Errorf("survey: finding %s on a loop closure of robot %s for the reason %s, expected held, refused or open and one line of printable text",
				quote(c.Verdict), quote(c.Robot), quote(c.Reason))
		}
		w.text(c.Robot)
		w.int(int64(c.Session))
		w.int(c.From)
		w.int(c.To)
		w.text(c.Verdict)
		w.text(c.Reason)
		known := !math.IsNaN(c.ChiSquare)
		w.optionalFloat(c.ChiSquare, known)
		w.optional(int64(c.DoF), known)
		w.optionalFloat(c.Threshold, known)
		w.end()
	}
	return putResult(dir, closuresName, w.b)
}

func validVerdict(s string) bool { return s == "held" || s == "refused" || s == "open" }

// LeaveOutClosures takes the loop closures that results/closures.csv calls refused or open out of s, which was read from the survey
// folder dir, and returns how many. Without such a file there are none. An error is *Violations when the content breaks the rules:
// every row is one of the loop closures of s, each at most once; s is then as it was.
func LeaveOutClosures(dir string, s *Survey) (int, error) {
	out, err := readClosures(dir, s)
	if err != nil {
		return 0, err
	}
	n := 0
	for i := range out {
		r, row := &s.Robots[i], -1
		r.Relatives = slices.DeleteFunc(r.Relatives, func(Relative) bool { row++; return out[i][row] })
		n += len(out[i]) - len(r.Relatives)
	}
	return n, nil
}

// readClosures returns for each robot of s and each of its relative poses whether the file leaves it out.
func readClosures(dir string, s *Survey) ([][]bool, error) {
	type key struct {
		robot    string
		session  uint32
		from, to int64
	}
	type place struct{ robot, row int }
	rows := map[key][]place{}
	out := make([][]bool, len(s.Robots))
	for i := range s.Robots {
		r := &s.Robots[i]
		out[i] = make([]bool, len(r.Relatives))
		for k := range r.Relatives {
			if m := &r.Relatives[k]; m.Kind == Closure {
				name := key{r.ID, m.Session, m.From, m.To}
				rows[name] = append(rows[name], place{i, k})
			}
		}
	}
	var bad sink
	t, err := openTable(dir, closuresName, closureColumns, true, &bad)
	if err != nil {
		return nil, err
	}
	if t == nil {
		return out, bad.err()
	}
	defer t.close()
	for {
		ok, err := t.next()
		if err != nil {
			return nil, err
		}
		if !ok {
			break
		}
		name := key{robot: string(t.text(0))}
		name.session, _ = t.session(1)
		name.from, _ = t.int64(2)
		name.to, _ = t.int64(3)
		verdict := string(t.text(4))
		if !validVerdict(verdict) {
			t.faultAt(4, quote(verdict), "held, refused or open")
		}
		if t.bad {
			continue
		}
		left := rows[name]
		if len(left) == 0 {
			t.faultAt(0, fmt.Sprintf("a loop closure of robot %s, session %d, from keyframe %d to %d", quote(name.robot), name.session, name.from, name.to),
				"one of this survey, each once")
			continue
		}
		out[left[0].robot][left[0].row] = verdict != "held"
		rows[name] = left[1:]
	}
	if err := bad.err(); err != nil {
		return nil, err
	}
	return out, nil
}
