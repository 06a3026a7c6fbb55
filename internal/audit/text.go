package audit

import (
	"fmt"
	"math"
	"strings"

	"selvage/internal/report"
)

// count writes a number of things.
func count(n int, thing string) string {
	return fmt.Sprint(n) + " " + plural(n, thing)
}

// plural is the word for several.
func plural(n int, thing string) string {
	switch {
	case n == 1:
		return thing
	case strings.HasSuffix(thing, "s"):
		return thing + "es"
	}
	return thing + "s"
}

// list writes names as in a sentence, no more than six of them.
func list(names []string) string {
	if len(names) > 6 {
		names = append(append([]string(nil), names[:5]...), fmt.Sprintf("%d more", len(names)-5))
	}
	if len(names) < 2 {
		return strings.Join(names, "")
	}
	return strings.Join(names[:len(names)-1], ", ") + " and " + names[len(names)-1]
}

// figure writes a number that may be missing with three digits.
func figure(x *float64, reason string) string {
	if x == nil {
		return report.Missing(reason)
	}
	return short(*x)
}

func short(x float64) string { return report.Digits(x, math.NaN()) }

// degrees writes an angle as people read it.
func degrees(x *float64, reason string) string {
	if x == nil {
		return report.Missing(reason)
	}
	return short(*x * 180 / math.Pi)
}

// probability writes a p-value.
func probability(p *float64, reason string) string {
	switch {
	case p == nil:
		return report.Missing(reason)
	case *p < 0.0001:
		return "< 0.0001"
	}
	return fmt.Sprintf("%.4f", *p)
}

// rough writes a number with two digits.
func rough(x float64) string { return report.Digits(x, max(math.Abs(x)/10, 1e-9)) }
