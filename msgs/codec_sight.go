package msgs

import "selvage/msgs/internal/pb"

// wholePose writes a pose that arrives bit for bit.
func wholePose(p *Pose) []float64 { return append(p.T[:len(p.T):len(p.T)], p.Q[:]...) }

func packSight(s *Sight) (*pb.Sight, error) {
	info, err := appendFactor(nil, s.Info[:], 3)
	if err != nil {
		return nil, in(in(err, "info"), "sight")
	}
	m := &pb.Sight{Sense: uint32(s.Sense), Value: s.Value[:], Info: info, Mount: wholePose(&s.Mount)}
	if s.Spot != [3]float64{} {
		m.Spot = s.Spot[:]
	}
	return m, nil
}

func takeSight(m *pb.Sight) (*Sight, error) {
	switch {
	case len(m.Value) != 3:
		return nil, wrong("value", len(m.Value), "3 numbers")
	case len(m.Info) != triangle(3):
		return nil, wrong("info", len(m.Info), "%d numbers", triangle(3))
	case len(m.Mount) != 7:
		return nil, wrong("mount", len(m.Mount), "7 numbers")
	case len(m.Spot) != 0 && len(m.Spot) != 3:
		return nil, wrong("spot", len(m.Spot), "0 or 3 numbers")
	}
	s := &Sight{
		Sense: Sense(min(m.Sense, 255)), Value: [3]float64(m.Value),
		Mount: Pose{T: [3]float64(m.Mount), Q: [4]float64(m.Mount[3:])},
	}
	copy(s.Spot[:], m.Spot)
	expand(s.Info[:], m.Info, 3)
	return s, nil
}

// packPoints writes marks and their places, two numbers a point in the plane.
func packPoints(points []Point, dim int) (marks []string, places []float64) {
	for i := range points {
		marks = append(marks, points[i].Mark)
		places = append(places, points[i].At[:placeNumbers(dim)]...)
	}
	return marks, places
}

func takePoints(marks []string, places []float64, dim int) ([]Point, error) {
	if err := checkCount("points", len(marks), 0, MaxPoints); err != nil {
		return nil, err
	}
	k := placeNumbers(dim)
	if len(places) != k*len(marks) {
		return nil, wrong("places", len(places), "%d numbers for %d points", k*len(marks), len(marks))
	}
	if len(marks) == 0 {
		return nil, nil
	}
	out := make([]Point, len(marks))
	for i, mark := range marks {
		out[i].Mark = mark
		copy(out[i].At[:], places[k*i:k*i+k])
	}
	return out, nil
}

// placeNumbers is how many numbers tell the place of a point.
func placeNumbers(dim int) int {
	if dim == 3 {
		return 2
	}
	return 3
}

func (p *Part) packLevels(m *pb.Part) {
	for i := range p.Levels {
		l := &p.Levels[i]
		m.LevelNodes = append(m.LevelNodes, uint32(l.Node))
		m.Levels = append(m.Levels, l.Up[0], l.Up[1], l.Up[2], l.Sigma)
	}
}

func (p *Part) takeLevels(m *pb.Part) error {
	if err := checkCount("levels", len(m.LevelNodes), 0, len(p.Junctions)); err != nil {
		return err
	}
	if len(m.Levels) != 4*len(m.LevelNodes) {
		return wrong("levels", len(m.Levels), "%d numbers for %d junctions", 4*len(m.LevelNodes), len(m.LevelNodes))
	}
	for i, node := range m.LevelNodes {
		p.Levels = append(p.Levels, Level{Node: int(node), Up: [3]float64(m.Levels[4*i:]), Sigma: m.Levels[4*i+3]})
	}
	return nil
}
