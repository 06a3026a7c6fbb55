package survey

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"reflect"
	"slices"
	"strings"
)

// Write writes s to the folder dir, which is made or, when it holds a survey,
// replaced with all its results. The same survey gives the same bytes.
//
// The folder is written beside dir under a hidden name, read back, and only
// then put in place, so dir holds the whole survey or what it held before. A
// survey that Read would refuse is not written: the error is *Violations and
// names the lines as they would have stood. Write refuses a dir that holds
// anything else than a survey, or rulings that s does not have.
func Write(dir string, s *Survey) error {
	if err := s.checkNames(); err != nil {
		return err
	}
	if err := replaceable(dir, s); err != nil {
		return err
	}
	dir, err := resolve(dir)
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	if err := os.MkdirAll(filepath.Dir(dir), 0o755); err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	tmp, err := os.MkdirTemp(filepath.Dir(dir), "."+filepath.Base(dir)+"-")
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	defer os.RemoveAll(tmp)
	written := filepath.Join(tmp, "new")
	if err := writeAll(written, s); err != nil {
		return err
	}
	if _, err := Read(written); err != nil {
		return err
	}
	// Two renames: the old folder goes to where RemoveAll finds it. Should the
	// second fail, the old one returns.
	old := filepath.Join(tmp, "old")
	err = os.Rename(dir, old)
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("survey: %w", err)
	}
	had := err == nil
	if err := os.Rename(written, dir); err != nil {
		if had {
			err = errors.Join(err, os.Rename(old, dir))
		}
		return fmt.Errorf("survey: %w", err)
	}
	return nil
}

// resolve returns the absolute path of dir with its symbolic links followed, so
// that a link is not what gets replaced.
func resolve(dir string) (string, error) {
	real, err := filepath.EvalSymlinks(dir)
	if errors.Is(err, fs.ErrNotExist) {
		real, err = dir, nil
	}
	if err != nil {
		return "", err
	}
	return filepath.Abs(real)
}

// sameMeta reports whether a and b are equal; no mounting equals an empty one.
func sameMeta(a, b *Meta) bool {
	plain := func(m *Meta) Meta {
		c := *m
		c.Robots = slices.Clone(m.Robots)
		for i := range c.Robots {
			if len(c.Robots[i].Mounting) == 0 {
				c.Robots[i].Mounting = nil
			}
		}
		return c
	}
	return reflect.DeepEqual(plain(a), plain(b))
}

// checkNames checks what has to be right before anything can be written: the
// meta data, and that Robots are those of the meta data in the same order.
func (s *Survey) checkNames() error {
	var bad sink
	report := func(path, found, expected string) {
		bad.add(Violation{File: metaName, Column: path, Found: found, Expected: expected})
	}
	s.Meta.check(report)
	if len(s.Robots) != len(s.Meta.Robots) {
		report("robots", fmt.Sprintf("%d robots listed, %d with data", len(s.Meta.Robots), len(s.Robots)), "the same robots in the same order")
		return bad.err()
	}
	for i := range s.Robots {
		if id := s.Robots[i].ID; id != s.Meta.Robots[i].ID {
			report(fmt.Sprintf("robots[%d].id", i), fmt.Sprintf("%q listed, %q with data", s.Meta.Robots[i].ID, id), "the same robots in the same order")
		}
	}
	return bad.err()
}

// replaceable returns an error unless dir is absent, empty, or a survey folder
// with nothing in it that Write would not write again or that is not computed
// from what it writes.
func replaceable(dir string, s *Survey) error {
	info, err := os.Stat(dir)
	if errors.Is(err, fs.ErrNotExist) {
		return nil
	}
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	if !info.IsDir() {
		return fmt.Errorf("survey: %s is a file, expected a folder to write to", dir)
	}
	entries, err := os.ReadDir(dir)
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	if len(entries) == 0 {
		return nil
	}
	if ok, err := isFile(filepath.Join(dir, metaName)); err != nil {
		return err
	} else if !ok {
		return fmt.Errorf("survey: %s is not empty and holds no %s, expected a new or empty folder or a survey", dir, metaName)
	}
	refuse := func(name string) error {
		return fmt.Errorf("survey: %s holds %s, which would be lost, expected a survey without it or another folder", dir, name)
	}
	for _, e := range entries {
		switch strings.TrimSuffix(e.Name(), ".gz") {
		case metaName, robotsName, marksName, tiesName, rulingsName, truthName, resultsName, injectedName:
		default:
			return refuse(e.Name())
		}
	}
	if err := KeepsRulings(dir, s); err != nil {
		return err
	}
	robots, err := os.ReadDir(filepath.Join(dir, robotsName))
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("survey: %w", err)
	}
	for _, robot := range robots {
		files, err := os.ReadDir(filepath.Join(dir, robotsName, robot.Name()))
		if err != nil {
			return fmt.Errorf("survey: %w", err)
		}
		for _, f := range files {
			switch strings.TrimSuffix(f.Name(), ".gz") {
			case keyframesName, relativeName, sightingsName:
			default:
				return refuse(robotsName + "/" + robot.Name() + "/" + f.Name())
			}
		}
	}
	return nil
}

// writeAll writes every file of s into the new folder dir.
func writeAll(dir string, s *Survey) error {
	yaml, err := encodeMeta(&s.Meta)
	if err != nil {
		return err
	}
	put := func(name string, text []byte) {
		if err == nil {
			err = writeTable(filepath.Join(dir, name), text)
		}
	}
	folder := func(name string) {
		if err == nil {
			err = os.MkdirAll(filepath.Join(dir, name), 0o755)
		}
	}
	folder(".")
	put(metaName, yaml)
	for i := range s.Robots {
		robot := &s.Robots[i]
		at := filepath.Join(robotsName, robot.ID)
		folder(at)
		put(filepath.Join(at, keyframesName), encodeKeyframes(robot.Keyframes))
		put(filepath.Join(at, relativeName), encodeRelatives(robot.Relatives))
		if len(robot.Sightings) > 0 {
			put(filepath.Join(at, sightingsName), encodeSightings(robot.Sightings, s.Meta.Dimension))
		}
	}
	if len(s.Marks) > 0 {
		put(marksName, encodeMarks(s.Marks))
	}
	put(tiesName, encodeTies(s.Ties, s.Meta.Dimension))
	if len(s.Rulings) > 0 {
		put(rulingsName, encodeRulings(s.Rulings))
	}
	if len(s.Truth) > 0 {
		put(truthName, encodeTruth(s.Truth))
	}
	if len(s.Injected) > 0 {
		put(injectedName, encodeInjected(s.Injected))
	}
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	return nil
}
