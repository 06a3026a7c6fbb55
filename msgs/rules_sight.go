package msgs

import "math"

func (s *Sight) check(dim int) error {
	if s.Sense < Position || s.Sense > Bearing {
		return wrong("sense", uint8(s.Sense), "1 position, 2 range and bearing, 3 range or 4 bearing")
	}
	measured := [...][3]bool{Position: {true, true, true}, RangeBearing: {true, true, true}, Range: {true}, Bearing: {false, true, true}}[s.Sense]
	measured[2] = measured[2] && dim == 6
	for i, x := range s.Value {
		switch {
		case !measured[i] && x != 0:
			return wrong("value", x, "0 for what is not measured")
		case !(math.Abs(x) <= MaxMetres):
			return wrong("value", x, "a number of at most %g", float64(MaxMetres))
		}
	}
	switch s.Sense {
	case RangeBearing, Range:
		if s.Value[0] < 0 {
			return wrong("value", s.Value[0], "a range of at least 0 m")
		}
	}
	if s.Sense == RangeBearing || s.Sense == Bearing {
		if !(math.Abs(s.Value[1]) <= math.Pi) {
			return wrong("value", s.Value[1], "a bearing within half a turn")
		}
		if !(math.Abs(s.Value[2]) <= math.Pi/2) {
			return wrong("value", s.Value[2], "an elevation within a quarter of a turn")
		}
	}
	if err := checkMatrix("info", s.Info[:]); err != nil {
		return err
	}
	for i := range 3 {
		for j := range 3 {
			if x := s.Info[3*i+j]; x != 0 && !(measured[i] && measured[j]) {
				return wrong("info", x, "0 in rows and columns of what is not measured")
			}
		}
	}
	if err := s.Mount.check(6); err != nil { // a sensor may be tilted and stand high in the plane too
		return in(err, "mount")
	}
	return checkPlace("spot", s.Spot)
}

func checkPlace(field string, at [3]float64) error {
	for _, x := range at {
		if !(math.Abs(x) <= MaxMetres) {
			return wrong(field, x, "a coordinate of at most %g m", float64(MaxMetres))
		}
	}
	return nil
}

// checkMarks accepts names in ascending order.
func checkMarks(field string, marks []string) error {
	if err := checkCount(field, len(marks), 0, MaxPoints); err != nil {
		return err
	}
	for i, m := range marks {
		if err := checkID("mark", m); err != nil {
			return at(err, field, i)
		}
		if i > 0 && m <= marks[i-1] {
			return at(wrong("mark", clip(m), "more than %s, the one before", marks[i-1]), field, i)
		}
	}
	return nil
}

func checkPoints(points []Point, dim int) error {
	if err := checkCount("points", len(points), 0, MaxPoints); err != nil {
		return err
	}
	for i := range points {
		p := &points[i]
		if err := checkID("mark", p.Mark); err != nil {
			return at(err, "points", i)
		}
		if i > 0 && p.Mark <= points[i-1].Mark {
			return at(wrong("mark", clip(p.Mark), "more than %s, the one before", points[i-1].Mark), "points", i)
		}
		if err := checkPlace("at", p.At); err != nil {
			return at(err, "points", i)
		}
		if dim == 3 && p.At[2] != 0 {
			return at(wrong("at", p.At[2], "no height in a planar survey"), "points", i)
		}
	}
	return nil
}

// checkSights looks at points, marks and levels of a part.
func (p *Part) checkSights(dim int) error {
	if err := checkPoints(p.Points, dim); err != nil {
		return err
	}
	if err := checkMarks("seen", p.Seen); err != nil {
		return err
	}
	for i, k := 0, 0; i < len(p.Seen) && k < len(p.Points); { // both ascend
		switch {
		case p.Seen[i] == p.Points[k].Mark:
			return at(wrong("mark", clip(p.Seen[i]), "none that is a point"), "seen", i)
		case p.Seen[i] < p.Points[k].Mark:
			i++
		default:
			k++
		}
	}
	if dim == 3 && len(p.Levels) > 0 {
		return wrong("levels", len(p.Levels), "none in a planar survey")
	}
	for i := range p.Levels {
		l := &p.Levels[i]
		if l.Node < 0 || l.Node >= len(p.Junctions) || i > 0 && l.Node <= p.Levels[i-1].Node {
			return at(wrong("node", l.Node, "an index below %d, ascending", len(p.Junctions)), "levels", i)
		}
		n := math.Sqrt(l.Up[0]*l.Up[0] + l.Up[1]*l.Up[1] + l.Up[2]*l.Up[2])
		if !(math.Abs(n-1) <= 1e-6) {
			return at(wrong("up", n, "a vector of length 1 to 1e-6"), "levels", i)
		}
		if !(l.Sigma > 0 && l.Sigma <= math.Pi) {
			return at(wrong("sigma", l.Sigma, "above 0, at most half a turn"), "levels", i)
		}
	}
	return nil
}
