package report

import (
	"math"
	"strconv"
	"strings"
)

// span is a closed interval of values, empty while lo > hi.
type span struct{ lo, hi float64 }

func emptySpan() span { return span{math.Inf(1), math.Inf(-1)} }

func (s span) empty() bool   { return s.lo > s.hi }
func (s span) size() float64 { return s.hi - s.lo }

// add widens the interval to hold v, if v is a finite number.
func (s *span) add(v float64) {
	if !math.IsNaN(v) && !math.IsInf(v, 0) {
		s.lo, s.hi = min(s.lo, v), max(s.hi, v)
	}
}

// join widens the interval to hold another, empty or not.
func (s *span) join(o span) { s.lo, s.hi = min(s.lo, o.lo), max(s.hi, o.hi) }

// niceStep is the smallest of 1, 2 and 5 times a power of ten that is not
// below v.
func niceStep(v float64) float64 {
	if !(v > 0) || math.IsInf(v, 0) {
		return 1
	}
	e := math.Pow(10, math.Floor(math.Log10(v)))
	for _, m := range [...]float64{1, 2, 5} {
		if m*e >= v*(1-1e-9) {
			return m * e
		}
	}
	return 10 * e
}

// ticks lists the multiples of step within s, a thousand at most.
func ticks(s span, step float64) []float64 {
	var out []float64
	first := math.Ceil(s.lo/step - 1e-9)
	for k := 0.0; k < 1000; k++ {
		v := (first + k) * step
		if v > s.hi+step*1e-9 || v == v+step {
			break
		}
		out = append(out, v)
	}
	return out
}

// tickText writes a tick with the decimals its step needs.
func tickText(v, step float64) string {
	dec := 0
	if step < 1 {
		dec = min(12, int(math.Ceil(-math.Log10(step)-1e-9)))
	}
	var s string
	switch {
	case math.Abs(v) >= 1e9:
		s = strconv.FormatFloat(v, 'g', 6, 64)
	case math.Abs(v) < step/2:
		s = strconv.FormatFloat(0, 'f', dec, 64)
	default:
		s = strconv.FormatFloat(v, 'f', dec, 64)
	}
	return strings.ReplaceAll(s, "-", "−")
}
