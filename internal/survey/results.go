package survey

import (
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
)

// ResultPose is the pose of one keyframe in the datum.
type ResultPose struct {
	Robot    string
	Session  uint32
	ID       int64
	StampNS  int64
	HasStamp bool
	Pose     Pose

	// Cov is the upper triangle, row by row, of the covariance of the tangent
	// x, y, z, rx, ry, rz (m, rad), a right perturbation in the frame of the
	// keyframe.
	Cov    [21]float64
	HasCov bool
}

// ResultVerdict is the finding on one tie.
type ResultVerdict struct {
	Tie     string
	Verdict string // held, refused or open
	Reason  string

	// The evidence: misclosure over its sigma squared, the threshold it was held
	// against, the redundancy of the tie and the smallest error that would have
	// been found. NaN leaves the field empty.
	ChiSquare  float64
	Threshold  float64
	Redundancy float64
	Detectable float64

	// Evidence is the verdict that a person's ruling has replaced: held, refused, open, or empty for none.
	Evidence string
}

// ResultDatum is the place of one session frame in the datum.
type ResultDatum struct {
	Robot   string
	Session uint32
	Joined  bool // it shares the datum; otherwise Pose is in that of its island
	Island  int  // from 0: sessions of one island hang together
	Pose    Pose // datum_from_session
}

// The columns of the results.
var (
	resultPoseColumns = columns([]column{{name: "robot"}, {name: "session"}, {name: "id"}, {name: "stamp_ns"}}, poseColumns, covarianceColumns())
	verdictColumns    = []column{{name: "tie"}, {name: "verdict"}, {name: "reason"},
		{name: "chi_square"}, {name: "threshold"}, {name: "redundancy"}, {name: "detectable"}, {name: "evidence", optional: true}}
	datumColumns = columns([]column{{name: "robot"}, {name: "session"}, {name: "joined"}, {name: "island"}}, poseColumns)
)

// verdictEvidence is the number of that column of verdicts.csv.
const verdictEvidence = 7

func covarianceColumns() []column {
	var all []column
	for i := range 6 {
		for j := i; j < 6; j++ {
			all = append(all, column{name: "cov_" + componentNames[i] + "_" + componentNames[j]})
		}
	}
	return all
}

// WriteResults writes results/poses.csv, results/verdicts.csv and
// results/datum_from_session.csv into the survey folder dir and leaves the other
// results as they are. Each file begins with a comment line, "# " and note,
// which names the epoch and the datum; the one of poses.csv goes on with the
// frame and the order of the covariance. All three files are complete before
// the first is put in place.
func WriteResults(dir string, poses []ResultPose, verdicts []ResultVerdict, datum []ResultDatum, note string) error {
	if !validNote(note) {
		return fmt.Errorf("survey: note %s, expected one line of printable text", quote(note))
	}
	for _, v := range verdicts {
		if v.Verdict != "held" && v.Verdict != "refused" && v.Verdict != "open" {
			return fmt.Errorf("survey: verdict %s on tie %s, expected held, refused or open", quote(v.Verdict), quote(v.Tie))
		}
		if e := v.Evidence; e != "" && e != "held" && e != "refused" && e != "open" {
			return fmt.Errorf("survey: evidence %s on tie %s, expected held, refused, open or nothing", quote(e), quote(v.Tie))
		}
		if !validTie(v.Tie) || !validNote(v.Reason) {
			return fmt.Errorf("survey: verdict on tie %s for the reason %s, expected a tie id and one line of printable text", quote(v.Tie), quote(v.Reason))
		}
	}
	for i := range poses {
		p := &poses[i]
		if err := checkResult(p.Robot, p.Session, p.Pose, p.Cov[:]); err != nil {
			return err
		}
	}
	for i := range datum {
		d := &datum[i]
		if err := checkResult(d.Robot, d.Session, d.Pose, nil); err != nil {
			return err
		}
	}
	results := filepath.Join(dir, resultsName)
	if err := os.MkdirAll(results, 0o755); err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	tmp, err := os.MkdirTemp(results, ".new-")
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	defer os.RemoveAll(tmp)
	files := []struct {
		name string
		text []byte
	}{
		{"poses.csv", encodeResultPoses(poses, note)},
		{"verdicts.csv", encodeVerdicts(verdicts, note)},
		{"datum_from_session.csv", encodeDatum(datum, note)},
	}
	for _, f := range files {
		if err := writeFile(filepath.Join(tmp, f.name), f.text); err != nil {
			return fmt.Errorf("survey: %w", err)
		}
	}
	for _, f := range files {
		err = errors.Join(err, os.Rename(filepath.Join(tmp, f.name), filepath.Join(results, f.name)))
	}
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	return nil
}

// checkResult returns an error unless the robot has a proper name and the
// numbers are finite.
func checkResult(robot string, session uint32, p Pose, cov []float64) error {
	if !validRobot(robot) {
		return fmt.Errorf("survey: robot %s, expected %s", quote(robot), robotRule)
	}
	for _, list := range [][]float64{p.T[:], p.Q[:], cov} {
		for _, v := range list {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				return fmt.Errorf("survey: pose of robot %s, session %d is not finite", robot, session)
			}
		}
	}
	return nil
}

// validNote reports whether s is one line of printable text.
func validNote(s string) bool { return printable(s, false) }

func (w *csvWriter) comment(parts ...string) {
	w.b = append(w.b, "# "...)
	for i, p := range parts {
		if i > 0 {
			w.b = append(w.b, "; "...)
		}
		w.b = append(w.b, p...)
	}
	w.b = append(w.b, '\n')
}

func encodeResultPoses(all []ResultPose, note string) []byte {
	hasCov := false
	for i := range all {
		hasCov = hasCov || all[i].HasCov
	}
	first := len(resultPoseColumns) - 21
	var w csvWriter
	if hasCov {
		w.comment(note, "pose datum_from_keyframe", "covariance of x y z rx ry rz (m, rad), right perturbation in the frame of the keyframe, upper triangle row by row")
	} else {
		w.comment(note, "pose datum_from_keyframe")
	}
	w.header(resultPoseColumns, func(c int) bool { return c >= first && !hasCov })
	for i := range all {
		p := &all[i]
		w.text(p.Robot)
		w.int(int64(p.Session))
		w.int(p.ID)
		w.optional(p.StampNS, p.HasStamp)
		w.pose(p.Pose)
		if hasCov {
			for _, v := range p.Cov {
				w.optionalFloat(v, p.HasCov)
			}
		}
		w.end()
	}
	return w.b
}

func encodeVerdicts(all []ResultVerdict, note string) []byte {
	var w csvWriter
	evidence := false
	for i := range all {
		evidence = evidence || all[i].Evidence != ""
	}
	w.comment(note)
	w.header(verdictColumns, func(c int) bool { return c == verdictEvidence && !evidence })
	for i := range all {
		v := &all[i]
		w.text(v.Tie)
		w.text(v.Verdict)
		w.text(v.Reason)
		for _, x := range [4]float64{v.ChiSquare, v.Threshold, v.Redundancy, v.Detectable} {
			w.optionalFloat(x, !math.IsNaN(x))
		}
		if evidence {
			w.text(v.Evidence)
		}
		w.end()
	}
	return w.b
}

func encodeDatum(all []ResultDatum, note string) []byte {
	var w csvWriter
	w.comment(note, "pose datum_from_session, of its island where joined is false")
	w.header(datumColumns, nil)
	for i := range all {
		d := &all[i]
		w.text(d.Robot)
		w.int(int64(d.Session))
		if d.Joined {
			w.text("true")
		} else {
			w.text("false")
		}
		w.int(int64(d.Island))
		w.pose(d.Pose)
		w.end()
	}
	return w.b
}

// optionalFloat writes a number or, unless has is set, an empty field.
func (w *csvWriter) optionalFloat(v float64, has bool) {
	if has {
		w.float(v)
	} else {
		w.sep()
	}
}
