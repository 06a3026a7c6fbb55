package survey

import (
	"math"
	"time"
)

// empty writes empty fields.
func (w *csvWriter) empty(n int) {
	for range n {
		w.sep()
	}
}

// position writes three values or sigmas of a sight of kind Position; those fields are empty for any other kind.
func (w *csvWriter) position(v *[3]float64, kind Kind) {
	for _, x := range v {
		w.optionalFloat(x, kind == Position)
	}
}

// polar writes range, bearing and elevation with their sigmas. What does not belong to the kind is empty, unless somebody has put a
// value there, which reading will then refuse.
func (w *csvWriter) polar(s *Sight, kind Kind, dim int) {
	belongs := [3]bool{kind == RangeBearing || kind == Range, kind == RangeBearing || kind == Bearing,
		dim == 3 && (kind == RangeBearing || kind == Bearing)}
	other := kind != Position && kind != WholePose
	for i, v := range s.Value {
		w.optionalFloat(v, belongs[i] || other && v != 0)
	}
	for i, v := range s.Sigma {
		w.optionalFloat(v, belongs[i] || other && !math.IsInf(v, 1))
	}
}

func encodeMarks(all []Mark) []byte {
	var w csvWriter
	w.header(markColumns, nil)
	for i := range all {
		m := &all[i]
		w.text(m.Name)
		w.text(m.Role.String())
		for _, v := range m.T {
			w.optionalFloat(v, m.Role != PlainMark || v != 0)
		}
		for _, v := range m.Sigma {
			w.optionalFloat(v, m.Role != PlainMark || v != 0)
		}
		w.end()
	}
	return w.b
}

func encodeSightings(all []Sighting, dim int) []byte {
	var stamp, sensor, position, polar bool // columns that some row needs
	var corr [3]bool
	for i := range all {
		m := &all[i]
		stamp = stamp || m.ByStamp
		sensor = sensor || m.Sight.Sensor != ""
		position = position || m.Kind == Position
		polar = polar || m.Kind != Position
		for k, v := range m.Sight.Corr {
			corr[k] = corr[k] || v != 0
		}
	}
	var w csvWriter
	w.header(sightingColumns, func(c int) bool {
		switch {
		case c == sightingStamp:
			return !stamp
		case c == sightingSensor:
			return !sensor
		case c < sightingPosition:
			return false
		case c < sightingPosition+6:
			return !position
		case c < sightingPosition+9:
			return !corr[c-sightingPosition-6]
		}
		return !polar
	})
	for i := range all {
		m := &all[i]
		w.int(int64(m.Session))
		w.optional(m.Key, !m.ByStamp)
		if stamp {
			w.optional(m.StampNS, m.ByStamp)
		}
		w.text(m.Mark)
		w.text(m.Kind.String())
		if sensor {
			w.text(m.Sight.Sensor)
		}
		if position {
			w.position(&m.Sight.Value, m.Kind)
			w.position(&m.Sight.Sigma, m.Kind)
		}
		for k, v := range m.Sight.Corr {
			if corr[k] {
				w.optionalFloat(v, m.Kind == Position)
			}
		}
		if polar {
			w.polar(&m.Sight, m.Kind, dim)
		}
		w.end()
	}
	return w.b
}

func encodeRulings(all []Ruling) []byte {
	var w csvWriter
	w.header(rulingColumns, nil)
	for i := range all {
		w.row(all[i].fields())
	}
	return w.b
}

// row writes a line of texts.
func (w *csvWriter) row(fields []string) {
	for _, f := range fields {
		w.text(f)
	}
	w.end()
}

// fields returns a ruling as it stands in the columns of its table.
func (m *Ruling) fields() []string {
	session := ""
	if m.Target == OnSession {
		session = formatSession(m.Session)
	}
	return []string{m.Target.String(), m.Name, session, m.Verdict.String(), m.By, m.Note, m.Time.UTC().Format(time.RFC3339Nano)}
}
