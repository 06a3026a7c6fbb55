package scenarios

import (
	"math"
	"testing"

	"selvage/internal/lie"
	"selvage/internal/survey"
)

// chi2 returns the squared Mahalanobis distance of a measured pose from the true one.
func chi2(t *testing.T, a, b *lie.SE3, z survey.Pose, c survey.Cov, dim int) float64 {
	t.Helper()
	m := lie.FromQuat(z.T, z.Q)
	e := m.Between(a.Between(*b))
	r := e.Log()
	info, err := c.Information(dim)
	if err != nil {
		t.Fatal(err)
	}
	sum := 0.0
	for i := range r {
		for j := range r {
			sum += r[i] * info[6*i+j] * r[j]
		}
	}
	return sum
}

// consistent checks that the mean of n squared distances of dim degrees of freedom is what the stated sigmas promise (NEES,
// Bar-Shalom, Li, Kirubarajan, "Estimation with Applications to Tracking and Navigation", 2001), at four standard deviations.
func consistent(t *testing.T, what string, sum float64, n, dim int) {
	t.Helper()
	mean := sum / float64(n*dim)
	if band := 4 * math.Sqrt(2/float64(n*dim)); n < 30 || math.Abs(mean-1) > band {
		t.Errorf("%s: %d measurements, mean square %.4f, want 1 +- %.4f", what, n, mean, band)
	}
}

func TestNoiseIsAsStated(t *testing.T) {
	for _, name := range BuiltinNames() {
		sc, w := world(t, name, 11, func(sc *Scenario) { sc.FrontEnd.HeadingBias, sc.Ties.Spacing = 0, 20 }) // more ties, to see their spread
		deg := map[int]int{2: 3, 3: 6}[sc.Dimension()]
		var odo, clo, enc, rev float64
		var nOdo, nClo, nEnc, nRev int
		for r := range w.Survey.Robots {
			pose := w.tracks[r].pose
			for _, m := range w.Survey.Robots[r].Relatives {
				c := chi2(t, &pose[m.From], &pose[m.To], m.Pose, m.Cov, sc.Dimension())
				if m.Kind == survey.Odometry {
					odo, nOdo = odo+c, nOdo+1
				} else {
					clo, nClo = clo+c, nClo+1
				}
			}
		}
		for i, tie := range w.Survey.Ties {
			a, _ := robotNumber(tie.FromRobot)
			b, _ := robotNumber(tie.ToRobot)
			c := chi2(t, &w.tracks[a].pose[tie.FromKey], &w.tracks[b].pose[tie.ToKey], tie.Pose, tie.Cov, sc.Dimension())
			switch {
			case !w.TieTrue[i]:
				if c < 100 {
					t.Errorf("%s: false tie %s has chi-square %.1f against the truth, hard to tell from a true one", name, tie.ID, c)
				}
			case c > 45: // beyond 4e-8 for six degrees of freedom
				t.Errorf("%s: true tie %s has chi-square %.1f", name, tie.ID, c)
			case tie.Source == "encounter":
				enc, nEnc = enc+c, nEnc+1
			default:
				rev, nRev = rev+c, nRev+1
			}
		}
		consistent(t, name+" odometry", odo, nOdo, deg)
		consistent(t, name+" closures", clo, nClo, deg)
		consistent(t, name+" recognitions", rev, nRev, deg)
		if nEnc >= 30 {
			consistent(t, name+" encounters", enc, nEnc, deg)
		} else if name == "store" {
			t.Errorf("only %d encounters in the store", nEnc)
		}
	}
}

func TestHeadingBias(t *testing.T) {
	const sigma = 0.001
	sc, w := world(t, "store", 5, func(sc *Scenario) { short(sc); sc.Fleet.Robots = 40; sc.FrontEnd.HeadingBias = sigma })
	sum := 0.0
	for r := range w.Survey.Robots {
		pose := w.tracks[r].pose
		drift := 0.0
		for _, m := range w.Survey.Robots[r].Relatives {
			if m.Kind == survey.Odometry {
				z := lie.FromQuat(m.Pose.T, m.Pose.Q)
				e := pose[m.From].Between(pose[m.To]).Between(z)
				xi := e.Log()
				drift += xi[5]
			}
		}
		bias := drift / (w.tracks[r].travel[len(pose)-1])
		sum += bias * bias
	}
	// The noise of some hundred steps adds about sigma_rot^2/travel, 1 % here.
	mean := sum / float64(sc.Fleet.Robots) / (sigma * sigma)
	if band := 4 * math.Sqrt(2/float64(sc.Fleet.Robots)); math.Abs(mean-1) > band {
		t.Errorf("mean square of the biases is %.2f of the asked one, want 1 +- %.2f", mean, band)
	}
}

func TestKeyframesAreDeadReckoned(t *testing.T) {
	_, w := world(t, "wood", 2, short)
	for _, r := range w.Survey.Robots {
		if r.Keyframes[0].Pose != survey.Identity() {
			t.Errorf("%s starts at %v", r.ID, r.Keyframes[0].Pose)
		}
		n := 0
		for _, m := range r.Relatives {
			if m.Kind != survey.Odometry {
				continue
			}
			if n++; m.To != m.From+1 || m.To != int64(n) {
				t.Fatalf("%s: step %d joins %d and %d", r.ID, n, m.From, m.To)
			}
			a := lie.FromQuat(r.Keyframes[m.From].Pose.T, r.Keyframes[m.From].Pose.Q)
			b := lie.FromQuat(r.Keyframes[m.To].Pose.T, r.Keyframes[m.To].Pose.Q)
			z := lie.FromQuat(m.Pose.T, m.Pose.Q)
			e := z.Between(a.Between(b))
			for _, x := range e.Log() {
				if math.Abs(x) > 1e-9 {
					t.Fatalf("%s: keyframe %d is %g off its odometry", r.ID, m.To, x)
				}
			}
		}
		if n != len(r.Keyframes)-1 {
			t.Errorf("%s: %d steps for %d keyframes", r.ID, n, len(r.Keyframes))
		}
	}
}
