package audit

import (
	"math"
	"strings"
	"testing"
)

func TestBasinOfSite3(t *testing.T) {
	s, verdicts := site3(t)
	a := run(t, s, verdicts)
	b := &a.BasinTest
	// All sigmas are the same along all axes, so the isotropic cost is the statistic but for what the chord is shorter than the arc.
	if a.Basin != certified || b.Reason != "" || math.Abs(*b.Objective-a.Adjustment.T) > 1e-5*a.Adjustment.T || !(*b.Tolerance < 1e-3**b.Gap) {
		t.Errorf("%s, %+v; T = %g", a.Basin, b, a.Adjustment.T)
	}
	page := a.Page("", "")
	if text := strings.Join(page.Method, " "); !strings.Contains(text, "no eigenvalue lies below -") || strings.Contains(strings.Join(page.Cautions, " "), "not decided") {
		t.Errorf("cautions %q, method %q", page.Cautions, text)
	}
	var terminal strings.Builder
	if err := a.Text(&terminal); err != nil || !strings.Contains(terminal.String(), "- The starting basin is certified") {
		t.Errorf("%v: %s", err, terminal.String())
	}
	if a.Positions != nil {
		t.Errorf("positions without marks: %+v", a.Positions)
	}
}
