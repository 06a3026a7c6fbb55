package report

import (
	"math"
	"strconv"
)

// Digits writes value with as many digits as its standard deviation sigma
// deserves: the last digit is worth between a thirtieth and a third of sigma,
// so that rounding adds less than one per cent to the uncertainty and no digit
// is shown that says nothing. Both in the same unit. Where sigma is not a
// positive finite number, three significant digits are shown. A value that is
// no finite number is a dash with that reason.
func Digits(value, sigma float64) string {
	if math.IsNaN(value) || math.IsInf(value, 0) {
		return Missing("no finite value")
	}
	var last float64 // power of ten of the last digit
	switch {
	case sigma > 0 && !math.IsInf(sigma, 0):
		last = math.Floor(math.Log10(sigma / 3 * (1 + 1e-12)))
	case value == 0:
		return "0"
	default:
		last = math.Floor(math.Log10(math.Abs(value))) - 2
	}
	return toPower(value, int(max(-15, min(300, last))))
}

// toPower rounds value to a multiple of ten to the power last.
func toPower(value float64, last int) string {
	var s string
	if last >= 0 {
		unit := math.Pow(10, float64(last))
		s = strconv.FormatFloat(math.Round(value/unit)*unit, 'f', 0, 64)
	} else {
		s = strconv.FormatFloat(value, 'f', -last, 64)
	}
	if s[0] == '-' {
		if v, err := strconv.ParseFloat(s, 64); err == nil && v == 0 {
			return s[1:] // no minus before a rounded nothing
		}
	}
	return s
}

// Missing is the cell of a figure that was not computed: a dash with the
// reason. A table sets the reason as a note beneath it.
func Missing(reason string) string { return missingMark + reason }

const missingMark = "– "
