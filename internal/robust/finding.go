package robust

import (
	"fmt"

	"selvage/internal/evidence"
	"selvage/internal/posegraph"
)

// limits are chi-square at one in a thousand for one, two and three degrees of freedom (tables of chi-square).
var limits = [4]float64{0, 10.828, 13.816, 16.266}

// Limit returns the statistic above which a sighting that measures so many numbers (1 to 3) counts as wrong: a true one in a thousand
// does.
func Limit(freedoms int) float64 { return limits[max(1, freedoms)] }

// Finding is what is decided on one sighting, and why.
type Finding struct {
	Set     *posegraph.Sightings
	K       int
	Verdict evidence.Verdict // Held: its weight is 1; Refused: [evidence.Floor]; Open: it takes no part, its weight was 0
	Kept    bool             // held whatever it says, because [Options.Keep] asked for it

	// Statistic is how far it lies from what all others predict, chi-square with DoF degrees of freedom when it is true; held while it is
	// below Limit. With DoF 0 nothing else speaks of it and both are 0.
	Statistic float64
	DoF       int
	Limit     float64

	// Loose is the variance with which the others predict it, over its own, where that is largest; +Inf where they leave a direction
	// open. A prediction that is loose agrees with almost anything.
	Loose float64

	turns int // how often the verdict has changed in a review
}

// Reason says in plain words what the finding rests on.
func (f *Finding) Reason() string {
	switch {
	case f.Verdict == evidence.Open:
		return "takes no part in the solution"
	case f.DoF == 0 && f.Verdict == evidence.Held:
		return "nothing else speaks of it"
	case f.DoF == 0:
		return "does not fit, and nothing else speaks of it any more"
	case f.Kept && f.Statistic >= f.Limit:
		return fmt.Sprintf("kept as asked, though %.1f off what the others predict (%d degrees of freedom), limit %.1f", f.Statistic, f.DoF, f.Limit)
	case f.Verdict == evidence.Refused && f.Statistic >= f.Limit:
		return fmt.Sprintf("contradicts what the others predict: %.1f of %d degrees of freedom, limit %.1f", f.Statistic, f.DoF, f.Limit)
	case f.Verdict == evidence.Refused:
		return fmt.Sprintf("did not fit, and the others no longer predict it well enough to let it in: %.1f of %d degrees of freedom, limit %.1f", f.Statistic, f.DoF, f.Limit)
	}
	return fmt.Sprintf("agrees with what the others predict: %.1f of %d degrees of freedom, limit %.1f", f.Statistic, f.DoF, f.Limit)
}
