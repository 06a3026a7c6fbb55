package audit

import (
	"fmt"
	"math"
	"testing"

	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/reliability"
	"selvage/internal/survey"
)

// fan makes a robot that stands still, and another that drives around it on a regular polygon with odometry so good that its corners
// count as known. The first sees the other at every corner: with range and bearing, or the range alone and one bearing.
func fan(corners int, radius, sigma, angle float64, ranges bool) (*survey.Survey, []survey.ResultVerdict) {
	s := &survey.Survey{Meta: survey.Meta{Format: 1, Name: "fan", Dimension: 2, Datum: survey.Datum{Name: "d"}}}
	around := survey.Robot{ID: "around"}
	var verdicts []survey.ResultVerdict
	tie := func(kind survey.Kind, k int64, e survey.Sight) {
		id := fmt.Sprintf("%s%d", kind, k)
		s.Ties = append(s.Ties, survey.Tie{ID: id, FromRobot: "still", ToRobot: "around", ToKey: k, Kind: kind, Sight: e})
		verdicts = append(verdicts, survey.ResultVerdict{Tie: id, Verdict: "held"})
	}
	var last lie.SE3
	for k := range int64(corners) {
		at := 2 * math.Pi * float64(k) / float64(corners)
		x := lie.Identity()
		x.T = [3]float64{radius * math.Cos(at), radius * math.Sin(at)}
		around.Keyframes = append(around.Keyframes, survey.Keyframe{ID: k, Pose: adjust.Folder(&x)})
		if k > 0 {
			z := last.Between(x)
			around.Relatives = append(around.Relatives, survey.Relative{From: k - 1, To: k, Pose: adjust.Folder(&z), Cov: survey.Uncorrelated(1e-7*sigma, 1e-9)})
		}
		last = x
		e := survey.Sight{Value: [3]float64{radius, math.Remainder(at, 2*math.Pi)}, Sigma: [3]float64{sigma, angle, math.Inf(1)}}
		if !ranges {
			tie(survey.RangeBearing, k, e)
			continue
		}
		bearing := e
		bearing.Value[0], bearing.Sigma[0] = 0, math.Inf(1)
		e.Value[1], e.Sigma[1] = 0, math.Inf(1)
		tie(survey.Range, k, e)
		if k == 0 {
			tie(survey.Bearing, k, bearing)
		}
	}
	s.Robots = []survey.Robot{around, {ID: "still", Keyframes: []survey.Keyframe{{Pose: survey.Identity()}}}}
	return s, verdicts
}

// Ranges from the corners of a regular polygon fix a point with a dilution of precision of 2/sqrt(n), the least that there is (Levanon, 'Lowest
// GDOP in 2-D scenarios', IEE Proceedings Radar, Sonar and Navigation 147, 2000; from memory). Each of n ranges then has the
// redundancy (n-2)/n, for two of n are needed, and the one bearing that tells the heading has none.
func TestRangesAroundAPoint(t *testing.T) {
	for _, n := range []int{4, 5, 8} {
		const sigma = 0.1
		s, _ := fan(n, 20, sigma, 0.01, true)
		w := adjusted(t, s, func(int) bool { return true })
		still := w.p.Var[adjust.Key{Robot: "still"}]
		q := w.sigma.Of(still)
		near(t, "dilution of precision", math.Sqrt(q[0]+q[4])/sigma, 2/math.Sqrt(float64(n)), 1e-4)
		for i, m := range w.all {
			if w.sort[i] != partial {
				continue
			}
			f := w.assess(m, w.residual(m))
			if w.out.Ties[w.tie[i]].m != m {
				t.Fatal("not the tie")
			}
			if kind := s.Ties[w.tie[i]].Kind; kind == survey.Bearing {
				if f.DoF != 0 {
					t.Errorf("the one bearing has %d degrees of freedom, redundancy %v", f.DoF, f.Redundancy)
				}
				continue
			}
			r := float64(n-2) / float64(n)
			near(t, "redundancy of a range", f.Redundancy[0], r, 1e-4)
			near(t, "detectable error of a range", f.Detectable[0], reliability.Delta*sigma/math.Sqrt(r), 1e-4)
		}
	}
}

// Ranges and bearings from the middle of a regular polygon, by hand. Across the line of sight a bearing is worth t = R sigma_b; the
// point is known along each axis with the variance P = 2/n / (1/s^2 + 1/t^2), the heading with sigma_b^2/n, and the two do not mix.
// So the redundancy of a range is 1 - P/s^2, of a bearing 1 - P/t^2 - 1/n; together 2n - 3. An error of a range moves the point by
// P/s^2 of it, along the line of sight.
func TestRangesAndBearingsAroundAPoint(t *testing.T) {
	const n, radius, sigma, angle = 5, 12.0, 0.1, 0.02
	s, verdicts := fan(n, radius, sigma, angle, false)
	s.Ties[2].Sight.Value[0] += 0.05
	a := run(t, s, verdicts)
	across := radius * angle
	p := 2.0 / n / (1/(sigma*sigma) + 1/(across*across))
	ofRange, ofBearing := 1-p/(sigma*sigma), 1-p/(across*across)-1.0/n
	if d := a.Adjustment.DoF; d != 2*n-3 {
		t.Errorf("%d degrees of freedom, want %d", d, 2*n-3)
	}
	for k := range a.Ties {
		x := &a.Ties[k]
		if x.Status != Passed || x.DoF != 2 || x.Bridge {
			t.Fatalf("%+v", x)
		}
		near(t, x.ID+" redundancy of the range", *x.RedundancyTranslation, ofRange, 2e-4)
		near(t, x.ID+" redundancy of the bearing", *x.RedundancyRotation, ofBearing, 2e-4)
		near(t, x.ID+" detectable range", *x.DetectableM, reliability.Delta*sigma/math.Sqrt(ofRange), 2e-4)
		near(t, x.ID+" detectable bearing", *x.DetectableRad, reliability.Delta*angle/math.Sqrt(ofBearing), 2e-4)
	}
	x := &a.Ties[2] // 5 cm too long
	near(t, "residual of the long range", x.Residual[0], -0.05*ofRange, 2e-4)
	near(t, "leave-one-out of the long range", *x.ApartM, 0.05, 3e-4)
	near(t, "T", *x.T, 0.05*0.05/(sigma*sigma)*ofRange, 2e-4)
	if sum := *a.Ties[0].RedundancyTranslation + *a.Ties[0].RedundancyRotation; math.Abs(n*sum-(2*n-3)) > 1e-3 {
		t.Errorf("redundancies add up to %g, want %d", n*sum, 2*n-3)
	}
}
