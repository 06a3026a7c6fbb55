package main

import (
	"math"

	"selvage/internal/evidence"
	"selvage/internal/robust"
)

// unjoined is the reason of a verdict on a tie between frames that the adjustment could not join.
const unjoined = "nothing joins the frames of its two robots"

// judge writes what was decided on the ties that are less than a pose into their verdicts, as the coordinator does for whole poses: the
// statistic is that of the tie against what all others predict. What a person has ruled stays.
func (a *adjustment) judge(decided *robust.Result) {
	for tie, f := range a.problem.TieFindings(decided) {
		if a.rulings[tie] != nil {
			continue
		}
		v := &a.verdicts[tie]
		v.ChiSquare, v.Threshold, v.Redundancy, v.Detectable = math.NaN(), math.NaN(), math.NaN(), math.NaN()
		if f == nil {
			v.Verdict, v.Reason = evidence.Open.String(), unjoined
			continue
		}
		v.Verdict, v.Reason = f.Verdict.String(), f.Reason()
		if f.DoF > 0 {
			v.ChiSquare, v.Threshold = f.Statistic, f.Limit
		}
	}
}
