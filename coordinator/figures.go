package coordinator

import (
	"math"

	"selvage/internal/posegraph"
	"selvage/internal/reliability"
)

// Figures is what the newest solution says of one tie that it holds. The condensed graph says the same as the graphs of all robots
// together would.
type Figures struct {
	TieName
	Bridge        bool    // its loss would part its island: nothing checks it
	Redundancy    float64 // mean over what it measures: 0 nothing checks it, 1 the others know better than it
	Statistic     float64 // chi-square with DoF degrees of freedom when the tie is sound; NaN when nothing checks it
	DoF           int
	DetectableM   float64 // the largest error that its test may miss, metres and radians (see [reliability.Alpha] and
	DetectableRad float64 // [reliability.Power]); NaN when nothing checks it
}

// Figures returns the figures of the held ties of the newest solution, in the order in which the ties came.
func (c *Coordinator) Figures() ([]Figures, error) {
	j := c.joint
	if j == nil {
		return nil, nil
	}
	sigma, err := j.covariance()
	if err != nil {
		return nil, err
	}
	bridge := j.bridges()
	var out []Figures
	for i := range j.n.ties {
		if f := j.factor[i]; f >= 0 && j.weight(i) > 0 && j.n.ties[i].sight == nil {
			out = append(out, j.figures(i, bridge[i], sigma))
		}
	}
	return out, nil
}

// bridges says which ties are the only way between two parts of an island. That is found by search: their redundancy is zero but for
// rounding.
func (j *joint) bridges() map[int]bool {
	var edges [][2]int32
	var tie []int
	for i := range j.n.ties {
		if f := j.factor[i]; f >= 0 && j.weight(i) > 0 {
			edges = append(edges, [2]int32{int32(j.n.ties[i].from), int32(j.n.ties[i].to)})
			tie = append(tie, i)
		}
	}
	out := map[int]bool{}
	for k, class := range reliability.Cuts(len(j.n.units), edges) {
		out[tie[k]] = class == 0
	}
	return out
}

func (j *joint) figures(i int, bridge bool, sigma posegraph.Covariance) Figures {
	t, f, d := &j.n.ties[i], j.factor[i], j.graph.Dim
	nan := math.NaN()
	out := Figures{TieName: TieName{t.msg.Header.Robot, t.msg.ID}, Bridge: bridge, Statistic: nan, DetectableM: nan, DetectableRad: nan}
	if bridge {
		return out
	}
	p := make([]float64, d*d)
	j.ties.Predicted(f, &j.graph.Values, sigma, p)
	full := j.ties.Residual(f, &j.graph.Values)
	r, turns := full[:], 3
	if d == 3 {
		r, turns = []float64{full[0], full[1], full[5]}, 2
	}
	a := reliability.Assess(r, j.ties.Info(f), p)
	measured := 0
	for k, x := range a.Redundancy {
		if j.ties.Info(f)[k*(d+1)] > 0 {
			out.Redundancy += x
			measured++
		}
	}
	out.Redundancy /= float64(max(measured, 1))
	if a.DoF == 0 {
		return out
	}
	out.Statistic, out.DoF = a.T, a.DoF
	out.DetectableM, out.DetectableRad = largest(a.Detectable[:turns]), largest(a.Detectable[turns:])
	return out
}

// largest is the largest number that is one.
func largest(all []float64) float64 {
	out := math.NaN()
	for _, x := range all {
		if !math.IsNaN(x) && !(x <= out) {
			out = x
		}
	}
	return out
}
