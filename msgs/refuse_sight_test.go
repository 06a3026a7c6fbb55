package msgs

import (
	"math"
	"testing"
)

func TestSightRefused(t *testing.T) {
	for _, c := range []struct {
		text  string
		spoil func(x *Tie)
	}{
		{"sight.sense: found 0, expected 1 position", func(x *Tie) { x.Sight.Sense = 0 }},
		{"sight.sense: found 5", func(x *Tie) { x.Sight.Sense = 5 }},
		{"sight.value: found 0.5, expected 0 for what is not measured", func(x *Tie) { x.Sight.Value[2] = 0.5 }},
		{"sight.value: found NaN", func(x *Tie) { x.Sight.Value[0] = math.NaN() }},
		{"sight.value: found -1, expected a range", func(x *Tie) { x.Sight.Value[0] = -1 }},
		{"sight.value: found 4, expected a bearing", func(x *Tie) { x.Sight.Value[1] = 4 }},
		{"sight.value: found 2.5, expected 0", func(x *Tie) { x.Sight.Sense = Bearing }},
		{"sight.info: found 1, expected 0 in rows", func(x *Tie) { x.Sight.Info[8] = 1 }},
		{"sight.info", func(x *Tie) { x.Sight.Info[1] = 9 }},
		{"sight.info", func(x *Tie) { x.Sight.Info[0] = -1 }},
		{"sight.mount.pose: found 0", func(x *Tie) { x.Sight.Mount.Q = [4]float64{} }},
		{"sight.spot: found +Inf", func(x *Tie) { x.Sight.Spot[1] = math.Inf(1) }},
		{"sight: found a pose beside it", func(x *Tie) { x.Pose.Q[3] = 1 }},
		{"sight: found a pose beside it", func(x *Tie) { x.Info = make([]float64, 9) }},
	} {
		x := find[Tie](t, "tie-sight")
		c.spoil(x)
		_, err := x.Marshal()
		wantError(t, c.text, err, c.text)
	}
}

func TestMarksRefused(t *testing.T) {
	for _, c := range []struct {
		text  string
		spoil func(p *Part)
	}{
		{"points[0].mark: found \"\"", func(p *Part) { p.Points[0].Mark = "" }},
		{"points[1].mark: found \"m1\", expected more than m1", func(p *Part) { p.Points[1].Mark = "m1" }},
		{"points[0].at: found NaN", func(p *Part) { p.Points[0].At[2] = math.NaN() }},
		{"points: found 16385", func(p *Part) { p.Points = make([]Point, 1<<14+1) }},
		{"seen[1].mark: found \"m0\"", func(p *Part) { p.Seen[1] = "m0" }},
		{"seen[1].mark: found \"m1\", expected none that is a point", func(p *Part) { p.Seen[1] = "m1" }},
		{"levels[0].node: found 2", func(p *Part) { p.Levels[0].Node = 2 }},
		{"levels[0].up: found 2", func(p *Part) { p.Levels[0].Up = [3]float64{0, 0, 2} }},
		{"levels[0].sigma: found 0", func(p *Part) { p.Levels[0].Sigma = 0 }},
		{"cliques[1].points.nodes: found 2", func(p *Part) { p.Cliques[1].Points[0] = 2 }},
		{"cliques[1].points.nodes: found 0, expected each index once", func(p *Part) { p.Cliques[1].Points[0] = 0 }},
		{"cliques[1].nodes: found 0", func(p *Part) { p.Cliques[1].Nodes = nil }},
		{"cliques[1].nodes: found 1, expected 2 to", func(p *Part) { p.Cliques[1].Points = nil }},
		{"cliques[1].h: found 36, expected 9", func(p *Part) { p.Cliques[1].Points = []int{0} }},
	} {
		x := find[Summary](t, "summary-marks")
		c.spoil(&x.Parts[0])
		_, err := x.Marshal()
		wantError(t, c.text, err, c.text)
	}
	x := find[Summary](t, "summary-marks")
	x.Dim = 3
	if _, err := x.Marshal(); err == nil {
		t.Error("marks with a height in a planar survey are accepted")
	}
	w := find[Want](t, "want")
	w.Marks = []string{"b", "a"}
	_, err := w.Marshal()
	wantError(t, "marks", err, "marks[1].mark: found \"a\", expected more than b")
}
