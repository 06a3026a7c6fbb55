package survey

import (
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
)

// newRulings is the name under which rulings are written before they take their place. While it exists nobody else appends.
const newRulings = ".rulings.csv.new"

// AppendRuling adds a ruling to rulings.csv of the survey folder dir, which has to be sound, and leaves every other byte of the table
// as it is. The new table takes the place of the old one whole. An error is *Violations when the ruling breaks the rules or is on
// something that does not exist; nothing has changed then.
func AppendRuling(dir string, m Ruling) error {
	lock := filepath.Join(dir, newRulings)
	f, err := os.OpenFile(lock, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if errors.Is(err, fs.ErrExist) {
		return fmt.Errorf("survey: somebody else is writing rulings of %s (if a program broke off: remove %s)", dir, lock)
	}
	if err != nil {
		return fmt.Errorf("survey: %w", err)
	}
	name, text, err := withRuling(dir, &m)
	if err == nil {
		if _, err = f.Write(text); err == nil {
			err = f.Sync()
		}
	}
	if e := f.Close(); err == nil {
		err = e
	}
	if err == nil {
		err = os.Rename(lock, filepath.Join(dir, name))
	}
	if err == nil {
		return nil
	}
	var bad *Violations
	if e := os.Remove(lock); e != nil {
		err = errors.Join(err, e)
	}
	if errors.As(err, &bad) {
		return err
	}
	return fmt.Errorf("survey: %w", err)
}

// withRuling returns the name of the table of rulings and what it is to hold.
func withRuling(dir string, m *Ruling) (name string, text []byte, err error) {
	r := &reader{root: dir}
	if err := r.read(); err != nil {
		return "", nil, err
	}
	name = rulingsName
	var w csvWriter
	t, err := openTable(dir, rulingsName, rulingColumns, true, &r.sink)
	if err != nil {
		return "", nil, err
	}
	row := m.fields()
	line := 2
	if t == nil {
		w.header(rulingColumns, nil)
		w.row(row)
	} else {
		name = t.name
		fields := make([]string, t.width) // what this version does not know stays empty
		for c, i := range t.at {
			fields[i] = row[c]
		}
		t.close()
		if w.b, err = readTable(filepath.Join(dir, name)); err != nil {
			return "", nil, err
		}
		if n := len(w.b); w.b[n-1] != '\n' {
			w.end()
		}
		line = bytes.Count(w.b, []byte{'\n'}) + 1
		w.row(fields)
	}
	fault := func(c int, found, expected string) {
		r.sink.add(Violation{File: name, Line: line, Column: rulingColumns[c].name, Found: found, Expected: expected})
	}
	m.check(fault)
	r.target(m, true, fault)
	if m.Target.String() == "unknown" || m.Verdict.String() == "unknown" {
		panic("survey: unknown target or verdict")
	}
	if err := r.sink.err(); err != nil {
		return "", nil, err
	}
	if filepath.Ext(name) == ".gz" {
		w.b, err = compress(w.b)
	}
	return name, w.b, err
}

// readTable returns the text of a table that has been read already.
func readTable(path string) ([]byte, error) {
	b, err := os.ReadFile(path)
	if err != nil || filepath.Ext(path) != ".gz" {
		return b, err
	}
	z, err := gzip.NewReader(bytes.NewReader(b))
	if err != nil {
		return nil, err
	}
	var text bytes.Buffer
	_, err = text.ReadFrom(z)
	return text.Bytes(), err
}
