package evidence

import (
	"math"
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
)

// meeting makes glimpses of units a and b: n true ones with the given noise, then wrong ones that agree with each other.
func meeting(r *rand.Rand, a, b int, frames []lie.SE2, n, wrong int, noise float64) (g []Glimpse) {
	in := func(u int, x, y float64) [3]float64 {
		f := frames[u].Inv()
		return [3]float64{f.X + f.C*x - f.S*y, f.Y + f.S*x + f.C*y}
	}
	wrongly := lie.SE2{X: 20 * r.Float64(), Y: 20 * r.Float64(), C: 0, S: 1}
	for k := range n + wrong {
		x, y := 20*r.Float64(), 20*r.Float64()
		e := Glimpse{A: a, B: b, InA: in(a, x, y), Sigma: noise}
		e.InB = in(b, x+noise*r.NormFloat64()/math.Sqrt2, y+noise*r.NormFloat64()/math.Sqrt2)
		if k >= n { // one false alignment, as of a robot taken for another
			p := e.InB
			e.InB = [3]float64{wrongly.X + wrongly.C*p[0] - wrongly.S*p[1], wrongly.Y + wrongly.S*p[0] + wrongly.C*p[1]}
		}
		if r.IntN(2) == 0 {
			e.A, e.B, e.InA, e.InB = e.B, e.A, e.InB, e.InA
		}
		g = append(g, e)
	}
	return g
}

func someFrames(r *rand.Rand, n int) (f []lie.SE2) {
	for range n {
		f = append(f, lie.Exp2([3]float64{10 * r.Float64(), 10 * r.Float64(), 6 * r.Float64()}))
	}
	return f
}

func apart(a, b lie.SE2) (metres, radians float64) {
	d := a.Between(b).Log()
	return math.Hypot(d[0], d[1]), math.Abs(d[2])
}

// Four units: pairs 0-1, 1-2 and 2-3 meet truly, with wrong glimpses among them; 0 and 2 have met only by mistake, and their
// mistakes agree with each other.
func TestFramesThroughMistakes(t *testing.T) {
	for seed := range uint64(50) {
		r := rand.New(rand.NewPCG(seed, 1))
		truth := someFrames(r, 5)
		var g []Glimpse
		for k := range 3 {
			g = append(g, meeting(r, k, k+1, truth, 30, 5, 0.1)...)
		}
		g = append(g, meeting(r, 0, 2, truth, 0, 12, 0.1)...)
		frames := Frames(5, true, g, DefaultFrameOptions())
		for u := range 4 {
			m, a := apart(lie.Planar(&frames[u].Pose), lie.Planar(&frames[0].Pose).Mul(truth[0].Between(truth[u])))
			if frames[u].Group != 0 || frames[0].Pose != lie.Identity() || m > 0.5 || a > 0.03 {
				t.Errorf("seed %d: unit %d in group %d is off by %.2f m, %.3f rad", seed, u, frames[u].Group, m, a)
			}
		}
		if frames[4].Group != 4 || frames[4].Score != 0 {
			t.Errorf("seed %d: unit 4 met nobody and has joined group %d", seed, frames[4].Group)
		}
	}
}

// Units that do not meet make groups; two glimpses always make a hypothesis and so prove nothing.
func TestFramesInGroups(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	truth := someFrames(r, 6)
	g := append(meeting(r, 1, 3, truth, 10, 0, 0.1), meeting(r, 5, 2, truth, 10, 0, 0.1)...)
	g = append(g, meeting(r, 0, 4, truth, 2, 0, 0.1)...)
	want := []int{0, 1, 2, 1, 4, 2}
	for u, f := range Frames(6, true, g, DefaultFrameOptions()) {
		if f.Group != want[u] {
			t.Errorf("unit %d in group %d, want %d", u, f.Group, want[u])
		}
	}
}

// One frame drifts against the other: with the drift told, the frame that holds in the middle of the glimpses that made it is
// found; a rigid fit of all would not hold anywhere.
func TestFramesOfUnitsThatDrift(t *testing.T) {
	r := rand.New(rand.NewPCG(4, 4))
	truth := someFrames(r, 2)
	g := meeting(r, 0, 1, truth, 200, 0, 0.05)
	for k := range g {
		g[k].Drift = 0.05 * float64(k)
		p := &g[k].InA
		if g[k].A == 1 {
			p = &g[k].InB
		}
		p[0] += 0.05 * float64(k) // 10 m in all
	}
	frames := Frames(2, true, g, DefaultFrameOptions())
	want := truth[0].Between(truth[1])
	x, y := frames[1].Pose.T[0]-want.X, frames[1].Pose.T[1]-want.Y
	_, a := apart(lie.Planar(&frames[1].Pose), want)
	if frames[1].Group != 0 || x < 0 || x > 10 || math.Abs(y) > 1 || a > 0.1 {
		t.Errorf("off by %.2f m along the drift, %.2f m across, %.3f rad", x, y, a)
	}
}

// In space three glimpses make a hypothesis.
func TestFramesInSpace(t *testing.T) {
	for seed := range uint64(20) {
		r := rand.New(rand.NewPCG(seed, 3))
		x := lie.Exp(lie.Tangent{10 * r.Float64(), 10 * r.Float64(), 10 * r.Float64(), r.Float64(), r.Float64(), 2 * r.Float64()})
		var g []Glimpse
		for k := range 25 {
			p := [3]float64{20 * r.Float64(), 20 * r.Float64(), 5 * r.Float64()}
			e := Glimpse{A: 0, B: 1, InA: x.Apply(p), InB: p, Sigma: 0.05}
			for c := range p {
				e.InA[c] += 0.03 * r.NormFloat64()
			}
			if k%4 == 0 {
				e.InB = [3]float64{20 * r.Float64(), 20 * r.Float64(), 5 * r.Float64()}
			}
			g = append(g, e)
		}
		f := Frames(2, false, g, DefaultFrameOptions())
		d := x.Between(f[1].Pose)
		e := d.Log()
		if f[1].Group != 0 || math.Hypot(e[0], math.Hypot(e[1], e[2])) > 0.2 || math.Hypot(e[3], math.Hypot(e[4], e[5])) > 0.02 {
			t.Errorf("seed %d: off by %v", seed, e)
		}
	}
}
