package msgs

import "math"

func (x *Summary) check() error {
	if err := x.Header.check(); err != nil {
		return err
	}
	if err := checkDim(x.Dim); err != nil {
		return err
	}
	if x.Unchanged && len(x.Parts) != 0 {
		return wrong("parts", len(x.Parts), "none in an unchanged summary")
	}
	if err := checkCount("parts", len(x.Parts), 0, MaxParts); err != nil {
		return err
	}
	for i := range x.Parts {
		if i > 0 && x.Parts[i].Session <= x.Parts[i-1].Session {
			return at(wrong("session", x.Parts[i].Session, "more than %d, the one before", x.Parts[i-1].Session), "parts", i)
		}
		if err := x.Parts[i].check(x.Dim); err != nil {
			return at(err, "parts", i)
		}
	}
	return nil
}

func (p *Part) check(dim int) error {
	if err := checkCount("junctions", len(p.Junctions), 1, MaxJunctions); err != nil {
		return err
	}
	if err := checkCount("cliques", len(p.Cliques), 0, MaxCliques); err != nil {
		return err
	}
	if !(p.Cost >= 0) || math.IsInf(p.Cost, 1) {
		return wrong("cost", p.Cost, "a finite number of at least 0")
	}
	if p.Keyframes < 0 || p.Keyframes > MaxKeyframes {
		return wrong("keyframes", p.Keyframes, "0 to %d", MaxKeyframes)
	}
	resolved := 0
	for i := range p.Junctions {
		j := &p.Junctions[i]
		if i > 0 && j.ID <= p.Junctions[i-1].ID {
			return at(wrong("id", j.ID, "more than %d, the one before", p.Junctions[i-1].ID), "junctions", i)
		}
		if err := j.Pose.check(dim); err != nil {
			return at(err, "junctions", i)
		}
		if !(j.TravelM >= 0 && j.TravelM <= MaxMetres) {
			return at(wrong("travel_m", j.TravelM, "0 to %g m", float64(MaxMetres)), "junctions", i)
		}
		resolved += len(j.Resolved)
	}
	if err := checkCount("resolved", resolved, 0, MaxResolved); err != nil {
		return err
	}
	if err := p.checkSights(dim); err != nil {
		return err
	}
	seen, beside := make([]int, len(p.Junctions)), make([]int, len(p.Points)) // 1 + the last clique that named the junction, the point
	for i := range p.Cliques {
		if err := p.Cliques[i].check(dim, i+1, seen, beside); err != nil {
			return at(err, "cliques", i)
		}
	}
	return nil
}

func (c *Clique) check(dim, mark int, seen, beside []int) error {
	least := 2
	if len(c.Points) > 0 {
		least = 1
	}
	if err := checkNodes(c.Nodes, least, mark, seen); err != nil {
		return err
	}
	if err := checkNodes(c.Points, 0, mark, beside); err != nil {
		return in(err, "points")
	}
	d := dim*(len(c.Nodes)-1) + 3*len(c.Points)
	if len(c.H) != d*d {
		return wrong("h", len(c.H), "%d numbers", d*d)
	}
	if len(c.B) != d {
		return wrong("b", len(c.B), "%d numbers", d)
	}
	if err := checkMatrix("h", c.H); err != nil {
		return err
	}
	for _, x := range c.B {
		if !(math.Abs(x) <= math.MaxFloat32) {
			return wrong("b", x, "a number that float32 can hold")
		}
	}
	return nil
}

// checkNodes accepts a list of distinct indices into seen, and leaves mark there.
func checkNodes(nodes []int, least, mark int, seen []int) error {
	if err := checkCount("nodes", len(nodes), least, MaxCliqueNodes); err != nil {
		return err
	}
	for _, n := range nodes {
		if n < 0 || n >= len(seen) {
			return wrong("nodes", n, "an index below %d", len(seen))
		}
		if seen[n] == mark {
			return wrong("nodes", n, "each index once")
		}
		seen[n] = mark
	}
	return nil
}

func (x *Correction) check() error {
	if err := checkNames(x.Fleet, x.Robot); err != nil {
		return err
	}
	if err := checkDim(x.Dim); err != nil {
		return err
	}
	if err := checkCount("parts", len(x.Parts), 0, MaxParts); err != nil {
		return err
	}
	for i := range x.Parts {
		if i > 0 && x.Parts[i].Session <= x.Parts[i-1].Session {
			return at(wrong("session", x.Parts[i].Session, "more than %d, the one before", x.Parts[i-1].Session), "parts", i)
		}
		if err := x.Parts[i].check(x.Dim); err != nil {
			return at(err, "parts", i)
		}
	}
	return checkSignature(x.Signature)
}

func (p *CorrectedPart) check(dim int) error {
	if err := checkText("island", p.Island, MaxID); err != nil {
		return err
	}
	if err := checkCount("ids", len(p.IDs), 0, MaxJunctions); err != nil {
		return err
	}
	if len(p.Poses) != len(p.IDs) {
		return wrong("poses", len(p.Poses), "%d, one for each id", len(p.IDs))
	}
	for i := range p.IDs {
		if i > 0 && p.IDs[i] <= p.IDs[i-1] {
			return wrong("ids", p.IDs[i], "more than %d, the one before", p.IDs[i-1])
		}
		if err := p.Poses[i].check(dim); err != nil {
			return at(err, "poses", i)
		}
	}
	if err := checkPoints(p.Points, dim); err != nil {
		return err
	}
	if p.placed() {
		if err := p.DatumFromSession.check(dim); err != nil {
			return in(err, "datum_from_session")
		}
	}
	if err := checkCount("cov_nodes", len(p.CovNodes), 0, MaxCliques); err != nil {
		return err
	}
	if len(p.Cov) != len(p.CovNodes) {
		return wrong("cov", len(p.Cov), "%d, one for each list of nodes", len(p.CovNodes))
	}
	seen := make([]int, len(p.IDs))
	for i, nodes := range p.CovNodes {
		if err := checkNodes(nodes, 1, i+1, seen); err != nil {
			return at(err, "cov_nodes", i)
		}
		d := dim * len(nodes)
		if len(p.Cov[i]) != d*d {
			return at(wrong("size", len(p.Cov[i]), "%d numbers", d*d), "cov", i)
		}
		if err := checkMatrix("value", p.Cov[i]); err != nil {
			return at(err, "cov", i)
		}
	}
	return nil
}

// placed reports whether the session has a place in the datum of its island.
func (p *CorrectedPart) placed() bool { return len(p.IDs) > 0 || p.DatumFromSession != Pose{} }
