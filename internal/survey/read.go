package survey

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
)

// The files of a survey folder. A table may have .gz behind its name.
const (
	metaName      = "survey.yaml"
	robotsName    = "robots"
	keyframesName = "keyframes.csv"
	relativeName  = "relative.csv"
	sightingsName = "sightings.csv"
	marksName     = "marks.csv"
	tiesName      = "ties.csv"
	rulingsName   = "rulings.csv"
	truthName     = "truth.csv"
	resultsName   = "results"
)

// Read reads the survey folder dir. An error is *Violations when the content
// breaks the rules, otherwise it comes from the file system.
func Read(dir string) (*Survey, error) {
	info, err := os.Stat(dir)
	if err != nil {
		return nil, fmt.Errorf("survey: %w", err)
	}
	if !info.IsDir() {
		return nil, fmt.Errorf("survey: %s is a file, expected a survey folder", dir)
	}
	r := &reader{root: dir}
	if err := r.read(); err != nil {
		return nil, err
	}
	r.survey.Warnings = r.sink.warnings
	return &r.survey, nil
}

// read reads the whole folder.
func (r *reader) read() error {
	if err := r.meta(); err != nil {
		return err
	}
	if err := r.sink.err(); err != nil {
		return err // the tables make no sense without it
	}
	for _, step := range []func() error{r.robots, r.marks, r.sights, r.ties, r.rulings, r.truth, r.others} {
		if err := step(); err != nil {
			return err
		}
	}
	return r.sink.err()
}

// unit is one session of one robot.
type unit struct {
	robot   string
	session uint32
}

// key is one keyframe.
type key struct {
	session uint32
	id      int64
}

// reader holds what has been read of a folder.
type reader struct {
	root   string
	sink   sink
	survey Survey

	units map[unit]bool

	// keys holds the keyframes of each robot, also those of rows with another
	// mistake; nil for a robot whose keyframes could not all be told.
	keys map[string]map[key]bool

	markNames map[string]bool // nil when they could not all be told
	tieNames  map[string]bool // likewise
	warned    map[string]bool // what is to be said once
}

// rows calls row for each row of a table and reports whether it saw them all.
func (r *reader) rows(name string, columns []column, optional bool, row func(*table)) (whole bool, err error) {
	t, err := openTable(r.root, name, columns, optional, &r.sink)
	if t == nil || err != nil {
		return false, err
	}
	defer t.close()
	for {
		ok, err := t.next()
		if !ok || err != nil {
			return !t.lost, err
		}
		row(t)
	}
}

func (r *reader) robots() error {
	r.units = make(map[unit]bool)
	r.keys = make(map[string]map[key]bool)
	for _, m := range r.survey.Meta.Robots {
		for _, s := range m.Sessions {
			r.units[unit{m.ID, s}] = true
		}
		robot := Robot{ID: m.ID}
		if err := r.keyframes(&robot); err != nil {
			return err
		}
		if err := r.relatives(&robot); err != nil {
			return err
		}
		r.survey.Robots = append(r.survey.Robots, robot)
	}
	return nil
}

// sights reads what all robots have seen of marks.
func (r *reader) sights() error {
	for i := range r.survey.Robots {
		if err := r.sightings(&r.survey.Robots[i]); err != nil {
			return err
		}
	}
	return nil
}

func (r *reader) keyframes(robot *Robot) error {
	seen := make(map[key]bool)
	dim := r.survey.Meta.Dimension
	unnamed := false
	name := robotsName + "/" + robot.ID + "/" + keyframesName
	whole, err := r.rows(name, keyframeColumns, false, func(t *table) {
		var k Keyframe
		var sessionOK, idOK bool
		k.Session, sessionOK = r.session(t, keyframeSession, robot.ID)
		k.ID, idOK = t.int64(keyframeID)
		if sessionOK && idOK {
			id := key{k.Session, k.ID}
			if seen[id] {
				t.faultAt(keyframeID, fmt.Sprintf("%d a second time", k.ID), "each id once in a session")
			}
			seen[id] = true
		} else {
			unnamed = true
		}
		k.StampNS, k.HasStamp = t.stamp(keyframeStamp)
		k.Pose = t.pose(keyframePose, dim)
		if !t.bad {
			robot.Keyframes = append(robot.Keyframes, k)
		}
	})
	if !whole || unnamed {
		seen = nil
	}
	r.keys[robot.ID] = seen
	return err
}

func (r *reader) relatives(robot *Robot) error {
	dim := r.survey.Meta.Dimension
	name := robotsName + "/" + robot.ID + "/" + relativeName
	_, err := r.rows(name, relativeColumns, false, func(t *table) {
		var m Relative
		var sessionOK bool
		m.Session, sessionOK = r.session(t, relativeSession, robot.ID)
		m.From, m.To = t.ends(relativeFrom, relativeTo, func(c int, id int64) {
			if sessionOK {
				r.keyframe(t, c, robot.ID, m.Session, id)
			}
		})
		switch kind := t.text(relativeKind); string(kind) {
		case "odometry":
			m.Kind = Odometry
		case "closure":
			m.Kind = Closure
		default:
			t.faultAt(relativeKind, quote(string(kind)), "odometry or closure")
		}
		m.Pose = t.pose(relativePose, dim)
		m.Cov = t.cov(relativeCov)
		if !t.bad {
			robot.Relatives = append(robot.Relatives, m)
		}
	})
	return err
}

// ends reads the two keyframe ids of a relative pose, has each looked up by
// check, and complains when they are one and the same.
func (t *table) ends(cFrom, cTo int, check func(c int, id int64)) (from, to int64) {
	from, fromOK := t.int64(cFrom)
	to, toOK := t.int64(cTo)
	if fromOK {
		check(cFrom, from)
	}
	switch {
	case fromOK && toOK && from == to:
		t.faultAt(cTo, fmt.Sprintf("%d, the same as in column %s", to, t.columns[cFrom].name), "another keyframe")
	case toOK:
		check(cTo, to)
	}
	return from, to
}

// session reads a session number and complains unless survey.yaml lists it for
// the robot.
func (r *reader) session(t *table, c int, robot string) (uint32, bool) {
	s, ok := t.session(c)
	if ok && !r.units[unit{robot, s}] {
		t.faultAt(c, fmt.Sprint(s), "a session of robot "+robot+" that "+metaName+" lists")
		ok = false
	}
	return s, ok
}

// unit reads a robot and a session that survey.yaml lists.
func (r *reader) unit(t *table, cRobot, cSession int) (robot string, session uint32, ok bool) {
	robot = string(t.text(cRobot))
	if _, listed := r.keys[robot]; !listed {
		t.faultAt(cRobot, quote(robot), "a robot that "+metaName+" lists")
		return robot, 0, false
	}
	session, ok = r.session(t, cSession, robot)
	return robot, session, ok
}

// keyframe complains unless the keyframe exists.
func (r *reader) keyframe(t *table, c int, robot string, session uint32, id int64) {
	if keys := r.keys[robot]; keys != nil && !keys[key{session, id}] {
		t.faultAt(c, fmt.Sprint(id), fmt.Sprintf("a keyframe of robot %s, session %d", robot, session))
	}
}

// others names the files of the folder that are not read and refuses robots
// that survey.yaml does not list.
func (r *reader) others() error {
	names, err := list(r.root, "")
	if err != nil {
		return err
	}
	for _, name := range names {
		switch strings.TrimSuffix(name, ".gz") {
		case metaName, robotsName, marksName, tiesName, rulingsName, truthName, resultsName, injectedName:
		default:
			r.sink.warn("%s: not read by this version", name)
		}
	}
	robots, err := list(r.root, robotsName)
	if err != nil {
		return err
	}
	for _, id := range robots {
		if _, listed := r.keys[id]; !listed {
			r.sink.add(Violation{File: robotsName + "/" + id, Found: "a robot that " + metaName + " does not list", Expected: "its id there, or no such folder"})
			continue
		}
		names, err := list(r.root, robotsName+"/"+id)
		if err != nil {
			return err
		}
		for _, name := range names {
			switch strings.TrimSuffix(name, ".gz") {
			case keyframesName, relativeName, sightingsName:
			default:
				r.sink.warn("%s/%s/%s: not read by this version", robotsName, id, name)
			}
		}
	}
	return nil
}

// list returns the sorted names in a folder below root, leaving out hidden
// ones; none when there is no such folder.
func list(root, name string) ([]string, error) {
	entries, err := os.ReadDir(filepath.Join(root, filepath.FromSlash(name)))
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, fmt.Errorf("survey: %w", err)
	}
	var names []string
	for _, e := range entries {
		if !strings.HasPrefix(e.Name(), ".") {
			names = append(names, e.Name())
		}
	}
	slices.Sort(names)
	return names, nil
}
