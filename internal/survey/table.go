package survey

import (
	"bufio"
	"bytes"
	"compress/gzip"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
)

// column is one that a table may have. Its place in the list of columns handed
// to openTable is the number by which its values are asked for.
type column struct {
	name     string
	optional bool
}

// table reads a CSV file row by row. One row is one line; a field may be quoted
// but holds no line end. Every complaint goes to the sink with file and line.
type table struct {
	name    string
	sink    *sink
	columns []column
	at      []int // of each column: its place in the line, -1 when absent

	file *os.File
	r    *bufio.Reader
	left int64 // bytes that may still be read

	line   int      // number of the current line, from 1
	width  int      // fields in the header
	fields [][]byte // of the current row, valid until the next
	bad    bool     // something is wrong with the current row
	lost   bool     // a row could not be told apart into fields, or the table not be read to its end
}

// openTable opens root/name or root/name.gz and reads its header line. It
// returns nil and no error when there is nothing to read rows from: the file
// does not exist and is optional, or the sink has been told what is wrong.
func openTable(root, name string, columns []column, optional bool, s *sink) (*table, error) {
	path := filepath.Join(root, filepath.FromSlash(name))
	hasPlain, err := isFile(path)
	if err != nil {
		return nil, err
	}
	hasGz, err := isFile(path + ".gz")
	if err != nil {
		return nil, err
	}
	switch {
	case hasPlain && hasGz:
		s.add(Violation{File: name, Found: "it and " + name + ".gz", Expected: "one of the two"})
		return nil, nil
	case !hasPlain && !hasGz:
		if !optional {
			s.add(Violation{File: name, Found: "no such file", Expected: "this table, or " + name + ".gz"})
		}
		return nil, nil
	case hasGz:
		path += ".gz"
		name += ".gz"
	}
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("survey: %w", err)
	}
	t := &table{name: name, sink: s, columns: columns, file: f, left: maxTableBytes}
	var source io.Reader = f
	if hasGz {
		source, err = gzip.NewReader(bufio.NewReaderSize(f, 64<<10))
		if err != nil {
			t.close()
			return nil, t.ioError(err)
		}
	}
	t.r = bufio.NewReaderSize(source, maxLineBytes)
	if ok, err := t.header(); err != nil || !ok {
		t.close()
		return nil, err
	}
	return t, nil
}

func isFile(path string) (bool, error) {
	info, err := os.Stat(path)
	if errors.Is(err, fs.ErrNotExist) {
		return false, nil
	}
	if err != nil {
		return false, fmt.Errorf("survey: %w", err)
	}
	if !info.Mode().IsRegular() {
		return false, fmt.Errorf("survey: %s is not a regular file", path)
	}
	return true, nil
}

func (t *table) close() { t.file.Close() }

// ioError turns damaged gzip data into a violation and returns any other error.
func (t *table) ioError(err error) error {
	if strings.HasSuffix(t.name, ".gz") {
		var pathErr *fs.PathError
		if !errors.As(err, &pathErr) {
			t.lost = true
			t.fault("", "damaged gzip data ("+err.Error()+")", "a complete gzip file")
			return nil
		}
	}
	return fmt.Errorf("survey: %s: %w", t.name, err)
}

// fault reports a violation in the current line.
func (t *table) fault(column, found, expected string) {
	t.bad = true
	t.sink.add(Violation{File: t.name, Line: t.line, Column: column, Found: found, Expected: expected})
}

// faultAt reports a violation in column c of the current row.
func (t *table) faultAt(c int, found, expected string) { t.fault(t.columns[c].name, found, expected) }

// readLine returns the next line without its end, nil at the end of the table
// or when the rest cannot be read.
func (t *table) readLine() ([]byte, error) {
	t.line++
	b, err := t.r.ReadSlice('\n')
	t.left -= int64(len(b))
	switch {
	case t.left < 0:
		t.lost = true
		t.fault("", fmt.Sprintf("more than %d bytes", maxTableBytes), "a smaller table")
		return nil, nil
	case err == nil:
		b = b[:len(b)-1]
	case err == io.EOF:
		if len(b) == 0 {
			return nil, nil
		}
		t.sink.warn("%s:%d: the last line has no line end: was the file cut short?", t.name, t.line)
	case err == bufio.ErrBufferFull:
		t.lost = true
		t.fault("", fmt.Sprintf("a line of more than %d bytes", maxLineBytes), "shorter lines")
		return nil, nil
	default:
		return nil, t.ioError(err)
	}
	if n := len(b); n > 0 && b[n-1] == '\r' {
		b = b[:n-1]
	}
	return b, nil
}

// header reads the header line and finds the columns in it.
func (t *table) header() (bool, error) {
	line, err := t.readLine()
	if err != nil {
		return false, err
	}
	if line == nil {
		if !t.bad {
			t.fault("", "an empty file", "a header line")
		}
		return false, nil
	}
	line = bytes.TrimPrefix(line, []byte("\xef\xbb\xbf"))
	if t.line == 1 && bytes.HasPrefix(line, []byte("# ")) { // the note of results
		return t.header()
	}
	if !t.split(line) {
		return false, nil
	}
	t.width = len(t.fields)
	if t.width == 1 && bytes.ContainsAny(line, ";\t") {
		t.fault("", "a line without commas: "+quote(string(line)), "columns divided by commas")
		return false, nil
	}
	t.at = make([]int, len(t.columns))
	number := make(map[string]int, len(t.columns))
	for c, col := range t.columns {
		t.at[c] = -1
		number[col.name] = c
	}
	var unknown []string
	for i, f := range t.fields {
		c, known := number[string(f)]
		switch {
		case !known:
			unknown = append(unknown, quote(string(f)))
		case t.at[c] >= 0:
			t.faultAt(c, "it a second time", "each column once")
		default:
			t.at[c] = i
		}
	}
	for c, col := range t.columns {
		if t.at[c] < 0 && !col.optional {
			t.faultAt(c, "no such column", "it in the header line")
		}
	}
	if len(unknown) > 0 {
		const most = 20
		more := ""
		if len(unknown) > most {
			more = fmt.Sprintf(" and %d more", len(unknown)-most)
			unknown = unknown[:most]
		}
		t.sink.warn("%s: not read, unknown column: %s%s", t.name, strings.Join(unknown, ", "), more)
	}
	return !t.bad, nil
}

// next goes to the next row whose fields can be told apart. Empty lines are
// passed over.
func (t *table) next() (bool, error) {
	for {
		t.bad = false
		line, err := t.readLine()
		if line == nil || err != nil {
			return false, err
		}
		if t.line > maxTableRows+1 {
			t.lost = true
			t.fault("", fmt.Sprintf("more than %d rows", maxTableRows), "a smaller table")
			return false, nil
		}
		if len(line) == 0 {
			continue
		}
		if !t.split(line) {
			t.lost = true
			continue
		}
		if len(t.fields) != t.width {
			t.lost = true
			t.fault("", fmt.Sprintf("%d fields", len(t.fields)), fmt.Sprintf("%d as in the header line", t.width))
			continue
		}
		return true, nil
	}
}

// split cuts the line into t.fields, in place.
func (t *table) split(line []byte) bool {
	t.fields = t.fields[:0]
	for {
		if len(line) > 0 && line[0] == '"' {
			field, rest, ok := unquote(line)
			if !ok {
				t.fault("", "a quoted field that does not end, or goes on after its quote", `quotes around the whole field, "" for a quote in it`)
				return false
			}
			t.fields = append(t.fields, field)
			if rest == nil {
				return true
			}
			line = rest
			continue
		}
		i := bytes.IndexByte(line, ',')
		if i < 0 {
			t.fields = append(t.fields, trim(line))
			return true
		}
		t.fields = append(t.fields, trim(line[:i]))
		line = line[i+1:]
	}
}

// unquote reads the quoted field at the start of line. The rest begins behind
// the comma that follows and is nil at the end of the line.
func unquote(line []byte) (field, rest []byte, ok bool) {
	out := line[1:1]
	for i := 1; i < len(line); i++ {
		if line[i] != '"' {
			out = append(out, line[i])
			continue
		}
		if i+1 < len(line) && line[i+1] == '"' {
			out = append(out, '"')
			i++
			continue
		}
		if i+1 == len(line) {
			return out, nil, true
		}
		return out, line[i+2:], line[i+1] == ','
	}
	return nil, nil, false
}

// trim takes the blanks off both ends of a field.
func trim(f []byte) []byte {
	for len(f) > 0 && f[0] == ' ' {
		f = f[1:]
	}
	for len(f) > 0 && f[len(f)-1] == ' ' {
		f = f[:len(f)-1]
	}
	return f
}
