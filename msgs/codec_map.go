package msgs

import "selvage/msgs/internal/pb"

// Marshal writes a summary.
func (x *Summary) Marshal() ([]byte, error) {
	if err := x.check(); err != nil {
		return nil, ofKind(KindSummary, err)
	}
	m := &pb.Summary{
		Major: Major, Minor: Minor, Header: packHeader(&x.Header), Version: x.Version, Answers: packEpoch(x.Answers),
		Unchanged: x.Unchanged, Dim: uint32(x.Dim), Parts: make([]*pb.Part, len(x.Parts)),
	}
	for i := range x.Parts {
		p, err := packPart(&x.Parts[i], x.Dim)
		if err != nil {
			return nil, ofKind(KindSummary, at(err, "parts", i))
		}
		m.Parts[i] = p
	}
	return seal(KindSummary, m, x.Header.Signature, MaxSummary)
}

// DecodeSummary reads a summary.
func DecodeSummary(b []byte) (*Summary, error) {
	var m pb.Summary
	if err := open(KindSummary, b, &m, MaxSummary, 8); err != nil {
		return nil, err
	}
	h, err := takeHeader(m.Header, m.Signature)
	x := &Summary{Header: h, Version: m.Version, Answers: takeEpoch(m.Answers), Unchanged: m.Unchanged, Dim: int(m.Dim)}
	if err == nil {
		err = checkDim(x.Dim)
	}
	if err == nil && len(m.Parts) > 0 {
		x.Parts = make([]Part, len(m.Parts))
	}
	for i := 0; i < len(m.Parts) && err == nil; i++ {
		err = at(takePart(&x.Parts[i], m.Parts[i], x.Dim), "parts", i)
	}
	return checked(KindSummary, x, err, x.check)
}

func packPart(p *Part, dim int) (*pb.Part, error) {
	n := len(p.Junctions)
	m := &pb.Part{
		Session: p.Session, Cost: p.Cost, Keyframes: uint64(p.Keyframes), FirstId: p.Junctions[0].ID,
		IdSteps: make([]uint64, n-1), Poses: make([]float64, 0, n*dim), TravelM: make([]float32, n), StampSteps: make([]int64, n),
	}
	var stamp int64
	for i := range p.Junctions {
		j := &p.Junctions[i]
		if i > 0 {
			m.IdSteps[i-1] = uint64(j.ID) - uint64(p.Junctions[i-1].ID)
		}
		m.Poses = appendPose(m.Poses, &j.Pose, dim)
		m.TravelM[i] = float32(j.TravelM)
		m.StampSteps[i] = j.StampNS - stamp
		stamp = j.StampNS
		for _, r := range j.Resolved {
			m.ResolvedNodes = append(m.ResolvedNodes, uint32(i))
			m.ResolvedOffsets = append(m.ResolvedOffsets, r-j.StampNS)
		}
	}
	m.Points, m.Places = packPoints(p.Points, dim)
	m.Seen = p.Seen
	p.packLevels(m)
	beside := false
	for i := range p.Cliques {
		beside = beside || len(p.Cliques[i].Points) > 0
	}
	for i := range p.Cliques {
		c := &p.Cliques[i]
		m.Cliques = appendNodes(m.Cliques, c.Nodes)
		if beside {
			m.CliquePoints = appendNodes(m.CliquePoints, c.Points)
		}
		var err error
		if m.Blocks, err = appendFactor32(m.Blocks, c.H, len(c.B)); err != nil {
			return nil, at(in(err, "h"), "cliques", i)
		}
		for _, b := range c.B {
			m.Blocks = append(m.Blocks, float32(b))
		}
	}
	return m, nil
}

func takePart(p *Part, m *pb.Part, dim int) error {
	n := len(m.IdSteps) + 1
	if err := checkCount("junctions", n, 1, MaxJunctions); err != nil {
		return err
	}
	if len(m.Poses) != n*dim {
		return wrong("poses", len(m.Poses), "%d numbers for %d junctions", n*dim, n)
	}
	if len(m.TravelM) != n || len(m.StampSteps) != n {
		return wrong("junctions", [2]int{len(m.TravelM), len(m.StampSteps)}, "%d travelled lengths and stamps", n)
	}
	if len(m.ResolvedNodes) != len(m.ResolvedOffsets) {
		return wrong("resolved", [2]int{len(m.ResolvedNodes), len(m.ResolvedOffsets)}, "as many junctions as stamps")
	}
	if err := checkCount("resolved", len(m.ResolvedNodes), 0, MaxResolved); err != nil {
		return err
	}
	if m.Keyframes > MaxKeyframes {
		return wrong("keyframes", m.Keyframes, "0 to %d", MaxKeyframes)
	}
	p.Session, p.Cost, p.Keyframes = m.Session, m.Cost, int(m.Keyframes)
	p.Junctions = make([]Junction, n)
	id, stamp := m.FirstId, int64(0)
	for i := range p.Junctions {
		j := &p.Junctions[i]
		if i > 0 {
			id = int64(uint64(id) + m.IdSteps[i-1])
		}
		stamp += m.StampSteps[i]
		j.ID, j.TravelM, j.StampNS = id, float64(m.TravelM[i]), stamp
		var err error
		if j.Pose, err = takePose(m.Poses[i*dim:], dim); err != nil {
			return at(err, "junctions", i)
		}
	}
	for i, node := range m.ResolvedNodes {
		if uint64(node) >= uint64(n) {
			return wrong("resolved", node, "an index below %d", n)
		}
		j := &p.Junctions[node]
		j.Resolved = append(j.Resolved, j.StampNS+m.ResolvedOffsets[i])
	}
	var err error
	if p.Points, err = takePoints(m.Points, m.Places, dim); err != nil {
		return err
	}
	if len(m.Seen) > 0 {
		p.Seen = m.Seen
	}
	if err := p.takeLevels(m); err != nil {
		return err
	}
	return takeCliques(p, m, dim)
}

// takeCliques looks at every count before it expands the first matrix.
func takeCliques(p *Part, m *pb.Part, dim int) error {
	lists, err := splitNodes(m.Cliques, 1)
	if err != nil {
		return in(err, "cliques")
	}
	points := make([][]int, len(lists))
	if len(m.CliquePoints) > 0 {
		if points, err = splitNodes(m.CliquePoints, 0); err != nil {
			return in(err, "clique_points")
		}
		if len(points) != len(lists) {
			return wrong("clique_points", len(points), "%d lists, one for each clique", len(lists))
		}
	}
	numbers, room := 0, 0
	for i, l := range lists {
		if len(l) < 2 && len(points[i]) == 0 {
			return in(wrong("nodes", len(l), "2 to %d of them", MaxCliqueNodes), "cliques")
		}
		d := dim*(len(l)-1) + 3*len(points[i])
		numbers += triangle(d) + d
		room += d*d + d
	}
	if len(m.Blocks) != numbers {
		return wrong("blocks", len(m.Blocks), "%d numbers for %d cliques", numbers, len(lists))
	}
	if len(lists) == 0 {
		return nil
	}
	p.Cliques = make([]Clique, len(lists))
	space, from := make([]float64, room), m.Blocks
	take := func(n int) []float64 {
		s := space[:n:n]
		space = space[n:]
		return s
	}
	for i, l := range lists {
		d := dim*(len(l)-1) + 3*len(points[i])
		c := Clique{Nodes: l, Points: points[i], H: take(d * d), B: take(d)}
		expand(c.H, from[:triangle(d)], d)
		from = from[triangle(d):]
		for k := range c.B {
			c.B[k] = float64(from[k])
		}
		from = from[d:]
		p.Cliques[i] = c
	}
	return nil
}

func appendNodes(dst []uint32, nodes []int) []uint32 {
	dst = append(dst, uint32(len(nodes)))
	for _, n := range nodes {
		dst = append(dst, uint32(n))
	}
	return dst
}

// splitNodes takes apart what appendNodes put together, lists of least to MaxCliqueNodes nodes.
func splitNodes(flat []uint32, least int) ([][]int, error) {
	lists := 0
	for at := 0; at < len(flat); lists++ {
		n := int(flat[at])
		if n < least || n > MaxCliqueNodes {
			return nil, wrong("nodes", n, "%d to %d of them", least, MaxCliqueNodes)
		}
		at += 1 + n
		if at > len(flat) {
			return nil, wrong("nodes", len(flat), "%d numbers", at)
		}
	}
	if err := checkCount("nodes", lists, 0, MaxCliques); err != nil || lists == 0 {
		return nil, err
	}
	out := make([][]int, 0, lists)
	space := make([]int, len(flat)-lists)
	for at := 0; at < len(flat); {
		n := int(flat[at])
		var l []int
		if n > 0 {
			l = space[:n:n]
			space = space[n:]
		}
		for i := range l {
			l[i] = int(flat[at+1+i])
		}
		out = append(out, l)
		at += 1 + n
	}
	return out, nil
}

// Marshal writes a correction.
func (x *Correction) Marshal() ([]byte, error) {
	if err := x.check(); err != nil {
		return nil, ofKind(KindCorrection, err)
	}
	m := &pb.Correction{
		Major: Major, Minor: Minor, Fleet: x.Fleet, Robot: x.Robot, Epoch: packEpoch(x.Epoch), Term: x.Term,
		SummaryVersion: x.SummaryVersion, Dim: uint32(x.Dim), Parts: make([]*pb.CorrectedPart, len(x.Parts)),
	}
	for i := range x.Parts {
		p, err := packCorrectedPart(&x.Parts[i], x.Dim)
		if err != nil {
			return nil, ofKind(KindCorrection, at(err, "parts", i))
		}
		m.Parts[i] = p
	}
	return seal(KindCorrection, m, x.Signature, MaxCorrection)
}

// DecodeCorrection reads a correction.
func DecodeCorrection(b []byte) (*Correction, error) {
	var m pb.Correction
	if err := open(KindCorrection, b, &m, MaxCorrection, 9); err != nil {
		return nil, err
	}
	x := &Correction{
		Fleet: m.Fleet, Robot: m.Robot, Epoch: takeEpoch(m.Epoch), Term: m.Term, SummaryVersion: m.SummaryVersion,
		Dim: int(m.Dim), Signature: m.Signature,
	}
	err := checkDim(x.Dim)
	if err == nil && len(m.Parts) > 0 {
		x.Parts = make([]CorrectedPart, len(m.Parts))
	}
	for i := 0; i < len(m.Parts) && err == nil; i++ {
		err = at(takeCorrectedPart(&x.Parts[i], m.Parts[i], x.Dim), "parts", i)
	}
	return checked(KindCorrection, x, err, x.check)
}

func packCorrectedPart(p *CorrectedPart, dim int) (*pb.CorrectedPart, error) {
	m := &pb.CorrectedPart{Session: p.Session, Joined: p.Joined, Island: p.Island}
	if p.placed() {
		m.DatumFromSession = appendPose(nil, &p.DatumFromSession, dim)
	}
	for i, id := range p.IDs {
		if i == 0 {
			m.FirstId = id
		} else {
			m.IdSteps = append(m.IdSteps, uint64(id)-uint64(p.IDs[i-1]))
		}
		m.Poses = appendPose(m.Poses, &p.Poses[i], dim)
	}
	m.Points, m.Places = packPoints(p.Points, dim)
	for i, nodes := range p.CovNodes {
		m.Cliques = appendNodes(m.Cliques, nodes)
		var err error
		if m.CovBlocks, err = appendFactor32(m.CovBlocks, p.Cov[i], dim*len(nodes)); err != nil {
			return nil, at(err, "cov", i)
		}
	}
	return m, nil
}

func takeCorrectedPart(p *CorrectedPart, m *pb.CorrectedPart, dim int) error {
	p.Session, p.Joined, p.Island = m.Session, m.Joined, m.Island
	n := len(m.Poses) / dim
	if err := checkCount("ids", n, 0, MaxJunctions); err != nil {
		return err
	}
	if len(m.Poses) != n*dim || len(m.IdSteps) != max(n-1, 0) {
		return wrong("poses", [2]int{len(m.Poses), len(m.IdSteps)}, "%d numbers for each id, and an id step between two", dim)
	}
	var err error
	switch len(m.DatumFromSession) {
	case 0:
	case dim:
		if p.DatumFromSession, err = takePose(m.DatumFromSession, dim); err != nil {
			return in(err, "datum_from_session")
		}
	default:
		return wrong("datum_from_session", len(m.DatumFromSession), "0 or %d numbers", dim)
	}
	if n > 0 {
		p.IDs, p.Poses = make([]int64, n), make([]Pose, n)
	}
	for i, id := 0, m.FirstId; i < n; i++ {
		if i > 0 {
			id = int64(uint64(id) + m.IdSteps[i-1])
		}
		p.IDs[i] = id
		if p.Poses[i], err = takePose(m.Poses[i*dim:], dim); err != nil {
			return at(err, "poses", i)
		}
	}
	if p.Points, err = takePoints(m.Points, m.Places, dim); err != nil {
		return err
	}
	if p.CovNodes, err = splitNodes(m.Cliques, 1); err != nil {
		return in(err, "cov_nodes")
	}
	numbers := 0
	for _, l := range p.CovNodes {
		numbers += triangle(dim * len(l))
	}
	if len(m.CovBlocks) != numbers {
		return wrong("cov", len(m.CovBlocks), "%d numbers for %d lists of nodes", numbers, len(p.CovNodes))
	}
	from := m.CovBlocks
	for _, l := range p.CovNodes {
		d := dim * len(l)
		cov := make([]float64, d*d)
		expand(cov, from[:triangle(d)], d)
		from = from[triangle(d):]
		p.Cov = append(p.Cov, cov)
	}
	return nil
}
