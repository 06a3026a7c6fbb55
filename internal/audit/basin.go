package audit

import (
	"errors"
	"fmt"
	"math"

	"selvage/internal/certificate"
)

// What is said of the starting basin.
const (
	certified  = "certified"
	notDecided = "not decided"
)

// BasinTest is what the certificate of the starting basin rests on, see package certificate.
type BasinTest struct {
	Reason    string   `json:"reason,omitempty"`    // why it was not decided
	Objective *float64 `json:"objective,omitempty"` // isotropic cost at its lowest point, to be held against the statistic of the adjustment
	Tolerance *float64 `json:"tolerance,omitempty"` // no eigenvalue lies below minus this
	Gap       *float64 `json:"gap,omitempty"`       // smallest eigenvalue beside those that belong to the gauge
}

// basin finds out whether the adjustment may have settled in a wrong valley.
func (w *work) basin() error {
	t := &w.out.BasinTest
	switch {
	case !w.out.Adjustment.Converged():
		t.Reason = "the adjustment did not converge"
		return nil
	case len(w.p.Sights()) > 0:
		t.Reason = "what is less than a relative pose takes part, and the proof knows relative poses only"
		return nil
	}
	r, err := certificate.Certify(w.p.Graph, w.b, func() bool { return w.ctx.Err() == nil })
	if errors.Is(err, certificate.ErrInterrupted) {
		return w.ctx.Err()
	}
	if err != nil {
		return err
	}
	t.Reason, t.Objective = r.Reason, &r.Objective
	if r.Tolerance > 0 {
		t.Tolerance, t.Gap = &r.Tolerance, finite(r.Gap)
	}
	if r.Certified {
		w.out.Basin = certified
	}
	return nil
}

// finite returns a number that is one.
func finite(x float64) *float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil
	}
	return &x
}

// basinLine says it in a sentence.
func (a *Audit) basinLine() string {
	if a.Basin == certified {
		return "The starting basin is certified: no other start would lead lower, as far as one weight for the rotation and one for the translation of a measurement tell."
	}
	return fmt.Sprintf("Whether another starting point would lead to a better map was not decided: %s.", a.BasinTest.Reason)
}

// basinMethod says how, for the page.
func (a *Audit) basinMethod() string {
	text := "Starting basin: with one weight for the rotation and one for the translation of each measurement, the lowest point near the map is proved to be the lowest of all by its dual ('Lagrangian Duality in 3D SLAM', IROS 2015; 'SE-Sync', International Journal of Robotics Research 38, 2019). That speaks for the valley in which the map was adjusted, not for the map."
	if t := &a.BasinTest; t.Tolerance != nil && t.Gap != nil {
		text += fmt.Sprintf(" Here that cost is %s, no eigenvalue lies below -%s, and the smallest beside those of the gauge is %s.", short(*t.Objective), short(*t.Tolerance), short(*t.Gap))
	}
	return text
}
