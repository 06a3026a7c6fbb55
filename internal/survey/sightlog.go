package survey

import (
	"bytes"
	"cmp"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
)

// SightingLog is what wheeled robots logged in the plane: the velocities they were told to drive, and what each has seen by range and
// bearing, of other robots and of landmarks. Robots and landmarks have numbers; zero is an identity that could not be told. Times are
// nanoseconds on one clock.
type SightingLog struct {
	name      string
	originNS  int64             // of the time zero of the tables
	robots    []int             // ascending
	commands  map[int][]command // by robot, in the order of time
	sightings []logSighting     // in the order of time
	landmarks map[int]Mark
	truth     map[int][]truthRow // by robot, in the order of time
	warnings  []string
}

// command is a velocity that holds until the next one.
type command struct {
	atNS int64
	v, w float64 // m/s forward, rad/s counter-clockwise
}

// logSighting is a row of observations.
type logSighting struct {
	observer, subject int
	atNS              int64
	rangeM, bearing   float64
	was               int // the subject before its identity was made wrong on purpose, else 0
}

type truthRow struct {
	atNS    int64
	x, y, a float64
}

var (
	logCommandColumns  = []column{{name: "robot"}, {name: "t_s"}, {name: "v_mps"}, {name: "w_radps"}}
	logSightingColumns = []column{{name: "observer"}, {name: "t_s"}, {name: "subject"}, {name: "range_m"}, {name: "bearing_rad"}, {name: "barcode", optional: true}}
	logLandmarkColumns = []column{{name: "subject"}, {name: "x_m"}, {name: "y_m"}, {name: "x_sd_m"}, {name: "y_sd_m"}}
	logTruthColumns    = []column{{name: "robot"}, {name: "t_s"}, {name: "x_m"}, {name: "y_m"}, {name: "theta_rad"}}
)

const (
	maxLogTime   = 1e6  // s
	maxLogSpeed  = 1000 // m/s and rad/s
	maxLogNumber = 1 << 20
)

// ReadSightingLog reads the tables in dir, gzipped or not:
//
//	odometry.csv         robot, t_s, v_mps, w_radps
//	observations.csv     observer, t_s, subject, range_m, bearing_rad     (subject: a robot, a landmark, or 0)
//	landmarks_truth.csv  subject, x_m, y_m, x_sd_m, y_sd_m                (optional)
//	truth.csv            robot, t_s, x_m, y_m, theta_rad                  (optional)
//	run.json             time_origin_unix_s, where t_s is zero            (optional)
//
// A subject is a robot if odometry.csv has rows of it. What is wrong is returned as *Violations.
func ReadSightingLog(dir string) (*SightingLog, error) {
	l := &SightingLog{name: "sighting log", commands: make(map[int][]command), landmarks: make(map[int]Mark), truth: make(map[int][]truthRow)}
	if at, err := filepath.Abs(dir); err == nil && validText(filepath.Base(at)) {
		l.name = filepath.Base(at)
	}
	r := &reader{root: dir}
	for _, step := range []func(*reader) error{l.readOrigin, l.readCommands, l.readSightings, l.readLandmarks, l.readTruth} {
		if err := step(r); err != nil {
			return nil, err
		}
	}
	if err := r.sink.err(); err != nil {
		return nil, err
	}
	l.warnings = r.sink.warnings
	return l, nil
}

func (l *SightingLog) readOrigin(r *reader) error {
	const name = "run.json"
	f, err := os.Open(filepath.Join(r.root, name))
	if errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, maxYAMLBytes+1))
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	var run struct {
		Origin float64 `json:"time_origin_unix_s"`
	}
	fault := func(line int, column, found, expected string) {
		r.sink.add(Violation{File: name, Line: line, Column: column, Found: found, Expected: expected})
	}
	if len(data) > maxYAMLBytes {
		fault(0, "", fmt.Sprintf("more than %d bytes", maxYAMLBytes), "a smaller file")
		return nil
	}
	if err := json.Unmarshal(data, &run); err != nil {
		var syntax *json.SyntaxError
		line := 0
		if errors.As(err, &syntax) {
			line = 1 + bytes.Count(data[:syntax.Offset], []byte{'\n'})
		}
		fault(line, "", err.Error(), "a JSON object")
		return nil
	}
	const most = 9e9 // s, within 64 bits of nanoseconds
	if !(math.Abs(run.Origin) <= most) {
		fault(0, "time_origin_unix_s", fmt.Sprint(run.Origin), fmt.Sprintf("at most %g s either way", most))
		return nil
	}
	l.originNS = nanoseconds(run.Origin)
	return nil
}

func (l *SightingLog) readCommands(r *reader) error {
	_, err := r.rows("odometry.csv", logCommandColumns, false, func(t *table) {
		robot, at := t.number(0, 1), t.seconds(1)
		m := command{at, t.within(2, -maxLogSpeed, maxLogSpeed), t.within(3, -maxLogSpeed, maxLogSpeed)}
		if !t.bad {
			l.commands[robot] = append(l.commands[robot], m)
		}
	})
	for robot, all := range l.commands {
		slices.SortStableFunc(all, func(a, b command) int { return cmp.Compare(a.atNS, b.atNS) })
		l.robots = append(l.robots, robot)
	}
	slices.Sort(l.robots)
	if len(l.robots) > maxRobots {
		r.sink.add(Violation{File: "odometry.csv", Found: fmt.Sprintf("%d robots", len(l.robots)), Expected: fmt.Sprintf("1 to %d", maxRobots)})
	}
	if err == nil && len(l.robots) == 0 && r.sink.Total == 0 {
		r.sink.add(Violation{File: "odometry.csv", Found: "no rows", Expected: "what the robots drove"})
	}
	return err
}

func (l *SightingLog) readSightings(r *reader) error {
	_, err := r.rows("observations.csv", logSightingColumns, false, func(t *table) {
		m := logSighting{observer: t.number(0, 1), atNS: t.seconds(1), subject: t.number(2, 0),
			rangeM: t.within(3, minRange, maxMetres), bearing: t.within(4, -2*math.Pi, 2*math.Pi)}
		if t.bad {
			return
		}
		if l.commands[m.observer] == nil {
			t.faultAt(0, t.shown(0), "a robot of which odometry.csv has rows")
		}
		if m.subject == m.observer {
			t.faultAt(2, t.shown(2), "another subject than the observer")
		}
		if !t.bad {
			l.sightings = append(l.sightings, m)
		}
	})
	slices.SortStableFunc(l.sightings, func(a, b logSighting) int { return cmp.Compare(a.atNS, b.atNS) })
	return err
}

func (l *SightingLog) readLandmarks(r *reader) error {
	_, err := r.rows("landmarks_truth.csv", logLandmarkColumns, true, func(t *table) {
		subject := t.number(0, 1)
		m := Mark{Sigma: Unmeasured}
		for i := range 2 {
			m.T[i] = t.within(1+i, -maxMetres, maxMetres)
			m.Sigma[i], _ = t.sigma(3+i, false)
		}
		if _, twice := l.landmarks[subject]; twice && !t.bad {
			t.faultAt(0, t.shown(0)+" a second time", "each landmark once")
		}
		if l.commands[subject] != nil && !t.bad {
			t.faultAt(0, t.shown(0), "a landmark: this is a robot of which odometry.csv has rows")
		}
		if !t.bad {
			l.landmarks[subject] = m
		}
	})
	return err
}

func (l *SightingLog) readTruth(r *reader) error {
	_, err := r.rows("truth.csv", logTruthColumns, true, func(t *table) {
		robot := t.number(0, 1)
		m := truthRow{t.seconds(1), t.within(2, -maxMetres, maxMetres), t.within(3, -maxMetres, maxMetres), t.within(4, -2*math.Pi, 2*math.Pi)}
		if !t.bad {
			l.truth[robot] = append(l.truth[robot], m)
		}
	})
	for _, all := range l.truth {
		slices.SortStableFunc(all, func(a, b truthRow) int { return cmp.Compare(a.atNS, b.atNS) })
	}
	return err
}

// number returns the whole number in column c, from least on.
func (t *table) number(c, least int) int {
	v, ok := t.int64(c)
	if ok && (v < int64(least) || v > maxLogNumber) {
		t.faultAt(c, t.shown(c), fmt.Sprintf("%d to %d", least, maxLogNumber))
	}
	return int(v)
}

// seconds returns the time in column c in nanoseconds.
func (t *table) seconds(c int) int64 { return nanoseconds(t.within(c, -maxLogTime, maxLogTime)) }

func nanoseconds(s float64) int64 { return int64(math.Round(s * 1e9)) }

// within returns the number in column c, which has to lie between two others.
func (t *table) within(c int, lo, hi float64) float64 {
	v, ok := t.float(c)
	if ok && !(lo <= v && v <= hi) {
		t.faultAt(c, t.shown(c), fmt.Sprintf("%.9g to %.9g", lo, hi))
		return 0
	}
	return v
}
