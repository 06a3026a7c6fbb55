package scenarios

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"selvage/coordinator"
	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/report"
	"selvage/internal/survey"
	"selvage/msgs"
)

// summaryName is the file that tells the folder of a rehearsal from any other.
const summaryName = "results/summary.json"

// ErrOccupied says that a folder holds something that a rehearsal must not replace.
var ErrOccupied = errors.New("folder in use")

// CheckFolder returns an error unless dir is absent, empty, or the folder of an earlier rehearsal with nothing in it that a person
// added, but for rulings that s has too; s may be nil. The error wraps ErrOccupied or comes from the file system.
func CheckFolder(dir string, s *survey.Survey) error {
	info, err := os.Stat(dir)
	if errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	if err != nil {
		return err
	}
	if !info.IsDir() {
		return fmt.Errorf("%s is a file, expected a new folder: %w", dir, ErrOccupied)
	}
	entries, err := os.ReadDir(dir)
	if err != nil || len(entries) == 0 {
		return err
	}
	if _, err := os.Stat(filepath.Join(dir, summaryName)); err != nil {
		return fmt.Errorf("%s is not empty and holds no earlier rehearsal (no %s), expected a new folder: %w", dir, summaryName, ErrOccupied)
	}
	ours := []string{"survey.yaml", "robots", "marks.csv", "ties.csv", "rulings.csv", "truth.csv", "results"}
	for _, e := range entries {
		if !slices.Contains(ours, strings.TrimSuffix(e.Name(), ".gz")) {
			return fmt.Errorf("%s holds %s, which would be lost, expected a folder without it: %w", dir, e.Name(), ErrOccupied)
		}
	}
	if err := survey.KeepsRulings(dir, s); err != nil {
		return fmt.Errorf("%w: %w", err, ErrOccupied)
	}
	return nil
}

// Write writes the run to the folder dir: the survey with its truth, and results/ with the score, the map, the verdicts and the
// report. An earlier rehearsal in dir is replaced, anything else refused (CheckFolder). The folder is made beside dir under a hidden
// name and then put in place as a whole. Made is the date and time as the report prints it, version the program's; the same run,
// score, made and version give the same bytes.
func (r *Run) Write(dir string, score *Score, made, version string) error {
	if err := CheckFolder(dir, r.Outing.Survey); err != nil {
		return err
	}
	dir, err := filepath.Abs(dir)
	if err != nil {
		return err
	}
	if err := os.MkdirAll(filepath.Dir(dir), 0o755); err != nil {
		return err
	}
	tmp, err := os.MkdirTemp(filepath.Dir(dir), "."+filepath.Base(dir)+"-")
	if err != nil {
		return err
	}
	defer os.RemoveAll(tmp)
	fresh, old := filepath.Join(tmp, "new"), filepath.Join(tmp, "old")
	if err := r.fill(fresh, score, made, version); err != nil {
		return err
	}
	// Two renames: the old folder goes to where RemoveAll finds it. Should the second fail, the old one returns.
	err = os.Rename(dir, old)
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	had := err == nil
	if err := os.Rename(fresh, dir); err != nil {
		if had {
			err = errors.Join(err, os.Rename(old, dir))
		}
		return err
	}
	return nil
}

// fill writes everything into the new folder dir.
func (r *Run) fill(dir string, score *Score, made, version string) error {
	if err := survey.Write(dir, r.Outing.Survey); err != nil {
		return err
	}
	places := r.places()
	poses, err := r.resultPoses(places)
	if err != nil {
		return err
	}
	if err := survey.WriteResults(dir, slices.Concat(poses...), r.Verdicts(), r.resultDatum(places), r.note(score)); err != nil {
		return err
	}
	if err := survey.WriteHistory(dir, r.Changes(), fmt.Sprintf("rehearsal %s, every verdict on every tie, from the first on; stamps on the clock of the base", score.Name)); err != nil {
		return err
	}
	if err := survey.WriteClosures(dir, r.Closures(), r.note(score)); err != nil {
		return err
	}
	summary, err := json.MarshalIndent(score, "", "  ")
	if err != nil {
		return err
	}
	if err := os.WriteFile(filepath.Join(dir, summaryName), append(summary, '\n'), 0o644); err != nil {
		return err
	}
	page, err := r.page(score, places, poses, made, version)
	if err != nil {
		return err
	}
	var html bytes.Buffer
	if err := report.Write(&html, page); err != nil {
		return err
	}
	return os.WriteFile(filepath.Join(dir, "results", "report.html"), html.Bytes(), 0o644)
}

// note is the first line of each file of results.
func (r *Run) note(score *Score) string {
	note := fmt.Sprintf("rehearsal %s, map epoch %s, datum %s", score.Name, r.epochs(), r.Outing.Survey.Meta.Datum.Name)
	if r.Interrupted {
		note += ", interrupted"
	}
	to := "the first keyframe of the first robot of each island"
	if slices.ContainsFunc(r.Outing.Survey.Marks, func(m survey.Mark) bool { return m.Role == survey.ControlPoint }) {
		to = "control points or, in an island that these do not hold, the first keyframe of its first robot"
	}
	return note + "; covariance relative to " + to + ", from the adjustment of all data and held ties in one piece"
}

// epochs names the epochs of the corrections that the robots hold: one when they agree.
func (r *Run) epochs() string {
	lo, hi := ^uint64(0), uint64(0)
	for _, a := range r.Agents {
		joined := false
		for _, t := range a.Tracks() {
			joined = joined || t.Joined
		}
		if joined {
			e := a.Applied().Number
			lo, hi = min(lo, e), max(hi, e)
		}
	}
	switch {
	case lo > hi:
		return "none"
	case lo == hi:
		return fmt.Sprint(lo)
	}
	return fmt.Sprintf("%d to %d", lo, hi)
}

// resultPoses returns the final map with its covariances, session by session.
func (r *Run) resultPoses(places []place) ([][]survey.ResultPose, error) {
	known := r.known()
	verdict := r.verdicts()
	dim := known.Meta.Dimension
	p, err := adjust.New(known, func(k int) bool { return verdict[known.Ties[k].ID].Verdict == msgs.Held })
	if err != nil {
		return nil, err
	}
	type stamp struct {
		ns  int64
		has bool
	}
	stamps := make(map[adjust.Key]stamp, len(p.Keys))
	for i := range known.Robots {
		for _, k := range known.Robots[i].Keyframes {
			stamps[adjust.Key{Robot: known.Robots[i].ID, Session: k.Session, ID: k.ID}] = stamp{k.StampNS, k.HasStamp}
		}
	}
	out := make([][]survey.ResultPose, len(places))
	for i := range places {
		x := &places[i]
		robot := known.Robots[x.robot].ID
		list := make([]survey.ResultPose, len(x.IDs))
		for k, id := range x.IDs {
			pose := x.at(k, dim)
			key := adjust.Key{Robot: robot, Session: x.Session, ID: id}
			if v, known := p.Var[key]; known { // not a moment of which nothing that is held speaks
				p.Graph.Values.Poses[v] = pose
			}
			list[k] = survey.ResultPose{
				Robot: robot, Session: x.Session, ID: id, StampNS: stamps[key].ns, HasStamp: stamps[key].has, Pose: adjust.Folder(&pose),
			}
		}
		out[i] = list
	}
	if len(p.Keys) == 0 {
		return out, nil
	}
	if err := p.Begin(adjust.Given); err != nil {
		return nil, err
	}
	if err := p.Analyse(1); err != nil {
		return nil, err
	}
	cov, err := p.Solver().Covariance()
	if err != nil {
		return nil, fmt.Errorf("covariance of the map: %w", err)
	}
	for i := range out {
		for k := range out[i] {
			x := &out[i][k]
			if v, known := p.Var[adjust.Key{Robot: x.Robot, Session: x.Session, ID: x.ID}]; known {
				x.Cov, x.HasCov = upper(cov.Of(v)), true
			}
		}
	}
	return out, nil
}

// upper spreads a covariance of x y rz (9 numbers) or x y z rx ry rz (36) to the upper triangle of the latter, row by row; nil is
// zero.
func upper(c []float64) (out [21]float64) {
	if c == nil {
		return out
	}
	component := []int{0, 1, 2, 3, 4, 5}
	if len(c) == 9 {
		component = []int{0, 1, 5}
	}
	n := len(component)
	for i, row := range component {
		for j := i; j < n; j++ {
			out[row*(11-row)/2+component[j]] = c[n*i+j]
		}
	}
	return out
}

// Verdicts returns the finding on every tie, in the order of the survey.
func (r *Run) Verdicts() []survey.ResultVerdict {
	verdict, measured, live := r.verdicts(), r.measured(), r.figures()
	unknown := math.NaN()
	var out []survey.ResultVerdict
	for i := range r.Outing.Survey.Ties {
		id := r.Outing.Survey.Ties[i].ID
		f := verdict[id]
		v := survey.ResultVerdict{Tie: id, Verdict: report.Open, Reason: f.Reason, ChiSquare: unknown, Threshold: unknown, Redundancy: unknown, Detectable: unknown}
		switch f.Verdict {
		case msgs.Held:
			v.Verdict = report.Held
		case msgs.Refused:
			v.Verdict = report.Refused
		case msgs.Open:
		default:
			v.Reason = unheard
			if !measured[i] {
				v.Reason = "not yet measured when the run was stopped"
			}
		}
		if f.DoF > 0 {
			v.ChiSquare = f.Statistic
		}
		if f.Limit > 0 {
			v.Threshold = f.Limit
		}
		if x, known := live[id]; known && v.Verdict == report.Held {
			v.Redundancy, v.Detectable = x.Redundancy, x.DetectableM
		}
		out = append(out, v)
	}
	return out
}

// figures returns what the coordinator's last solution says of the ties it holds; nothing where it says nothing.
func (r *Run) figures() map[string]coordinator.Figures {
	out := map[string]coordinator.Figures{}
	all, err := r.Coordinator.Figures()
	if err != nil {
		return out
	}
	for _, f := range all {
		out[f.ID] = f
	}
	return out
}

// unheard is the reason for the verdict on a tie that the base knows nothing of.
const unheard = "never reached the base"

// resultDatum returns where every session frame lies.
func (r *Run) resultDatum(places []place) []survey.ResultDatum {
	var out []survey.ResultDatum
	for i := range places {
		p := &places[i]
		x := p.DatumFromSession
		if r.Outing.Survey.Meta.Dimension == 2 {
			x = lie.Planar(&x).Spatial()
		}
		out = append(out, survey.ResultDatum{
			Robot: r.Outing.Survey.Robots[p.robot].ID, Session: p.Session, Joined: p.number == 0, Island: p.number, Pose: adjust.Folder(&x),
		})
	}
	return out
}
