package survey

import (
	"math"
	"strconv"
)

// text returns the field in column c, "" when the table has no such column. It
// is valid until the next row.
func (t *table) text(c int) []byte {
	if i := t.at[c]; i >= 0 {
		return t.fields[i]
	}
	return nil
}

// shown returns the field in column c as a message shows it.
func (t *table) shown(c int) string {
	if t.at[c] < 0 {
		return "no such column"
	}
	return quote(string(t.fields[t.at[c]]))
}

// int64 returns the integer in column c and whether it is one.
func (t *table) int64(c int) (int64, bool) {
	v, err := strconv.ParseInt(string(t.text(c)), 10, 64)
	if err != nil {
		t.faultAt(c, quote(string(t.text(c))), "an integer of 64 bits")
	}
	return v, err == nil
}

// uint64 returns the whole number in column c and whether it is one.
func (t *table) uint64(c int) (uint64, bool) {
	v, err := strconv.ParseUint(string(t.text(c)), 10, 64)
	if err != nil {
		t.faultAt(c, quote(string(t.text(c))), "a whole number of 64 bits")
	}
	return v, err == nil
}

// stamp returns the integer in column c, which may be empty or absent.
func (t *table) stamp(c int) (ns int64, has bool) {
	if len(t.text(c)) == 0 {
		return 0, false
	}
	return t.int64(c)
}

// session returns the session number in column c and whether it is one.
func (t *table) session(c int) (uint32, bool) {
	v, err := strconv.ParseUint(string(t.text(c)), 10, 32)
	if err != nil {
		t.faultAt(c, quote(string(t.text(c))), "an integer from 0 to 4294967295")
	}
	return uint32(v), err == nil
}

// float returns the number in column c and whether it is one: decimal and
// finite.
func (t *table) float(c int) (float64, bool) {
	f := t.text(c)
	v, ok := parseFloat(f)
	if !ok {
		t.faultAt(c, t.shown(c), "a finite decimal number")
	}
	return v, ok
}

func parseFloat(f []byte) (float64, bool) {
	if len(f) == 1 && '0' <= f[0] && f[0] <= '9' { // most fields of most tables
		return float64(f[0] - '0'), true
	}
	for _, b := range f {
		if ('0' > b || b > '9') && b != '.' && b != '-' && b != '+' && b != 'e' && b != 'E' {
			return 0, false
		}
	}
	v, err := strconv.ParseFloat(string(f), 64)
	return v, err == nil && !math.IsInf(v, 0)
}
