package survey

import (
	"bytes"
	"compress/gzip"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
)

// csvWriter builds the text of a table.
type csvWriter struct {
	b    []byte
	rest bool // the current line has a field already
}

func (w *csvWriter) sep() {
	if w.rest {
		w.b = append(w.b, ',')
	}
	w.rest = true
}

func (w *csvWriter) end() {
	w.b = append(w.b, '\n')
	w.rest = false
}

// header writes the header line, leaving out the columns for which skip is set.
func (w *csvWriter) header(columns []column, skip func(c int) bool) {
	for c, col := range columns {
		if skip == nil || !skip(c) {
			w.text(col.name)
		}
	}
	w.end()
}

// text writes a field, in quotes where it needs them.
func (w *csvWriter) text(s string) {
	w.sep()
	if !bytes.ContainsAny([]byte(s), `,"`) {
		w.b = append(w.b, s...)
		return
	}
	w.b = append(w.b, '"')
	for i := range len(s) {
		if s[i] == '"' {
			w.b = append(w.b, '"')
		}
		w.b = append(w.b, s[i])
	}
	w.b = append(w.b, '"')
}

func (w *csvWriter) int(v int64) {
	w.sep()
	w.b = strconv.AppendInt(w.b, v, 10)
}

// optional writes an integer or, unless has is set, an empty field.
func (w *csvWriter) optional(v int64, has bool) {
	if has {
		w.int(v)
	} else {
		w.sep()
	}
}

// float writes the shortest digits that read back to v.
func (w *csvWriter) float(v float64) {
	w.sep()
	if math.IsInf(v, 1) {
		w.b = append(w.b, "inf"...)
		return
	}
	format := byte('g')
	if a := math.Abs(v); 1e-5 <= a && a <= maxMetres {
		format = 'f' // 4321000.5 rather than 4.3210005e+06
	}
	w.b = strconv.AppendFloat(w.b, v, format, -1, 64)
}

func (w *csvWriter) pose(p Pose) {
	for _, v := range p.T {
		w.float(v)
	}
	for _, v := range p.Q {
		w.float(v)
	}
}

// correlated is the set of correlations that some row of a table has. The
// others get no column.
type correlated [15]bool

func (u *correlated) add(c *Cov) {
	for k, v := range c.Corr {
		u[k] = u[k] || v != 0
	}
}

// skip leaves out the unused correlations among columns whose sigmas begin at
// number c0.
func (u *correlated) skip(c0 int) func(c int) bool {
	return func(c int) bool {
		k := c - c0 - 6
		return k >= 0 && k < len(u) && !u[k]
	}
}

func (w *csvWriter) cov(c *Cov, used *correlated) {
	for _, v := range c.Sigma {
		w.float(v)
	}
	for k, v := range c.Corr {
		if used[k] {
			w.float(v)
		}
	}
}

func encodeKeyframes(all []Keyframe) []byte {
	var w csvWriter
	w.header(keyframeColumns, nil)
	for i := range all {
		k := &all[i]
		w.int(int64(k.Session))
		w.int(k.ID)
		w.optional(k.StampNS, k.HasStamp)
		w.pose(k.Pose)
		w.end()
	}
	return w.b
}

func encodeRelatives(all []Relative) []byte {
	var used correlated
	for i := range all {
		used.add(&all[i].Cov)
	}
	var w csvWriter
	w.header(relativeColumns, used.skip(relativeCov))
	for i := range all {
		m := &all[i]
		w.int(int64(m.Session))
		w.int(m.From)
		w.int(m.To)
		w.text(m.Kind.String())
		w.pose(m.Pose)
		w.cov(&m.Cov, &used)
		w.end()
	}
	return w.b
}

func encodeTies(all []Tie, dim int) []byte {
	var used correlated
	var from, polar, sensor, target bool // columns that some row needs
	for i := range all {
		m := &all[i]
		if m.Kind == WholePose {
			used.add(&m.Cov)
			continue
		}
		c := m.Sight.cov()
		used.add(&c)
		from = from || m.FromByStamp
		polar = polar || m.Kind != Position
		sensor = sensor || m.Sight.Sensor != ""
		target = target || m.Sight.Target != ""
	}
	unused := used.skip(tieCov)
	var w csvWriter
	w.header(tieColumns, func(c int) bool {
		return unused(c) || c == tieFromStamp && !from || tiePolar <= c && c < tiePolar+6 && !polar ||
			c == tieSensor && !sensor || c == tieTarget && !target
	})
	for i := range all {
		m := &all[i]
		w.text(m.ID)
		w.text(m.FromRobot)
		w.int(int64(m.FromSession))
		w.optional(m.FromKey, !m.FromByStamp)
		if from {
			w.optional(m.FromStampNS, m.FromByStamp)
		}
		w.text(m.ToRobot)
		w.int(int64(m.ToSession))
		w.optional(m.ToKey, !m.ToByStamp)
		w.optional(m.ToStampNS, m.ToByStamp)
		w.text(m.Kind.String())
		if m.Kind == WholePose {
			w.pose(m.Pose)
			w.cov(&m.Cov, &used)
		} else {
			w.position(&m.Sight.Value, m.Kind)
			w.empty(4)
			w.position(&m.Sight.Sigma, m.Kind)
			w.empty(3)
			c := m.Sight.cov()
			for k, v := range c.Corr {
				if used[k] {
					w.optionalFloat(v, m.Kind == Position && slices.Contains(sightCorr[:], k))
				}
			}
		}
		if polar {
			w.polar(&m.Sight, m.Kind, dim)
		}
		if sensor {
			w.text(m.Sight.Sensor)
		}
		if target {
			w.text(m.Sight.Target)
		}
		w.text(m.Source)
		w.optional(m.StampNS, m.HasStamp)
		w.end()
	}
	return w.b
}

func encodeTruth(all []TruthPose) []byte {
	var w csvWriter
	w.header(truthColumns, nil)
	for i := range all {
		p := &all[i]
		w.text(p.Robot)
		w.int(int64(p.Session))
		w.optional(p.Key, !p.ByStamp)
		w.optional(p.StampNS, p.ByStamp)
		w.pose(p.Pose)
		w.end()
	}
	return w.b
}

// gzipAbove is the size in bytes from which a table is compressed.
const gzipAbove = 4 << 20

// writeTable writes a table to path, or to path.gz when it is large. The same
// text gives the same bytes.
func writeTable(path string, text []byte) error {
	if len(text) < gzipAbove {
		return writeFile(path, text)
	}
	text, err := compress(text)
	if err != nil {
		return err
	}
	return writeFile(path+".gz", text)
}

// compress gzips text, the same text to the same bytes.
func compress(text []byte) ([]byte, error) {
	var b bytes.Buffer
	z, err := gzip.NewWriterLevel(&b, gzip.BestSpeed)
	if err != nil {
		return nil, err
	}
	if _, err := z.Write(text); err != nil {
		return nil, err
	}
	err = z.Close()
	return b.Bytes(), err
}

// writeFile writes a new file and has it on the disk when it returns.
func writeFile(path string, data []byte) error {
	f, err := os.OpenFile(filepath.FromSlash(path), os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if err != nil {
		return err
	}
	_, err = f.Write(data)
	if err == nil {
		err = f.Sync()
	}
	if e := f.Close(); err == nil {
		err = e
	}
	return err
}
