package adjust

import (
	"math"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/internal/posegraph"
)

// Rigidity tells which own maps stand rigidly to each other. One sighting takes from two frames only a part of their freedom, so the
// question is one of rank, not of counting: frames that move alike in every motion which no measurement sees hang together.
//
// An own map is what the relative poses of its robot hold together, and moves as one. Ties of whole poses, of less, and marks that
// several maps have seen are rows of unit length, whatever their sigmas: what counts is the geometry at the present values.
type Rigidity struct {
	Body    []int32 // pose -> own map, numbered by their first poses
	Bodies  int
	dim     int
	links   []link
	marks   []commonMark
	centre  [][3]float64 // of the island of a body
	metres  []float64    // that the island of a body reaches from there
	connect []int32      // body -> island of the graph
}

// link is a tie between two bodies: rows by the twist of A, then of B.
type link struct {
	tie  int
	a, b int32
	rows [][2][6]float64
}

// commonMark is a mark that several bodies have seen.
type commonMark struct {
	mark int
	rows []sightRow
}

type sightRow struct {
	body  int32
	twist [6]float64
	point [3]float64
}

// loose is the least eigenvalue of the normal matrix of the unit rows that holds anything: frames that stand on a base shorter than
// 3e-5 of the island count as loose. Motions of two frames are alike if they differ by less than alike of a unit vector, squared. A tie is
// wanted where the others leave less than that of one of its directions.
const (
	loose  = 1e-9
	alike  = 1e-6
	wanted = 1e-6
	widest = 600 // scalars of the frames of one island; a survey in more pieces is not looked at so closely
)

// Rigidity looks at the problem as it stands: sightings that are cut off do not count.
func (p *Problem) Rigidity() *Rigidity {
	g := p.Graph
	r := &Rigidity{dim: g.Dim}
	isTie := make([]bool, p.Factors.Len())
	for _, f := range p.Tie {
		if f >= 0 {
			isTie[f] = true
		}
	}
	own := posegraph.New(g.Dim, g.Values.Poses)
	steps := own.AddBetween()
	for k := range p.Factors.I {
		if !isTie[k] && p.Factors.W[k] != 0 {
			steps.I, steps.J = append(steps.I, p.Factors.I[k]), append(steps.J, p.Factors.J[k])
		}
	}
	r.Body, r.Bodies = own.Components()
	r.frames(p)
	for t, f := range p.Tie {
		if f < 0 || p.Factors.W[f] == 0 {
			continue
		}
		l := link{tie: t, a: r.Body[p.Factors.I[f]], b: r.Body[p.Factors.J[f]]}
		for c := range r.dim {
			var row [2][6]float64
			row[0][c], row[1][c] = -math.Sqrt(0.5), math.Sqrt(0.5)
			l.rows = append(l.rows, row)
		}
		r.links = append(r.links, l)
	}
	at := map[int32]int{} // point -> marks
	ji, jj := make([]float64, 18), make([]float64, 18)
	for i := range p.sights {
		e := &p.sights[i]
		if e.Set == nil || e.Set.W[e.K] < 0.5 {
			continue
		}
		e.Set.Jacobians(e.K, &g.Values, ji, jj)
		if e.to >= 0 {
			r.encounter(e, g, ji, jj)
			continue
		}
		point := e.Set.To[e.K]
		m, seen := at[point]
		if !seen {
			m = len(r.marks)
			at[point] = m
			r.marks = append(r.marks, commonMark{mark: int(e.mark)})
		}
		r.sighting(e, &r.marks[m], g, ji, jj)
	}
	kept := r.marks[:0]
	for _, m := range r.marks {
		for _, s := range m.rows {
			if s.body != m.rows[0].body {
				kept = append(kept, m)
				break
			}
		}
	}
	r.marks = kept
	return r
}

// frames finds centre and reach of the islands.
func (r *Rigidity) frames(p *Problem) {
	poses := p.Graph.Values.Poses
	centre, count := make([][3]float64, p.Islands), make([]float64, p.Islands)
	reach := make([]float64, p.Islands)
	for v := range poses {
		i := p.Island[v]
		count[i]++
		for c, x := range poses[v].T {
			centre[i][c] += (x - centre[i][c]) / count[i]
		}
	}
	r.connect = make([]int32, r.Bodies)
	for v := range poses {
		i := p.Island[v]
		r.connect[r.Body[v]] = i
		d := 0.0
		for c, x := range poses[v].T {
			d += (x - centre[i][c]) * (x - centre[i][c])
		}
		reach[i] = max(reach[i], math.Sqrt(d), 1e-3)
	}
	for _, i := range r.connect {
		r.centre, r.metres = append(r.centre, centre[i]), append(r.metres, reach[i])
	}
}

// twist turns a row of derivatives by the tangent of a pose into one by the common twist of its body about the centre, lengths in
// units of the reach.
func (r *Rigidity) twist(x lie.SE3, body int32, row []float64) (out [6]float64) {
	for c := range x.T {
		x.T[c] -= r.centre[body][c]
	}
	back := x.Inv()
	turns := 3
	if r.dim == 3 {
		turns = 2
		ad := lie.Planar(&back).Adjoint()
		for c := range 3 {
			for k := range 3 {
				out[c] += row[k] * ad[3*k+c]
			}
		}
	} else {
		ad := back.Adjoint()
		for c := range 6 {
			for k := range 6 {
				out[c] += row[k] * ad[6*k+c]
			}
		}
	}
	for c := range turns {
		out[c] *= r.metres[body]
	}
	return out
}

func (r *Rigidity) encounter(e *sighted, g *posegraph.Graph, ji, jj []float64) {
	l := link{tie: e.Tie, a: r.Body[e.from], b: r.Body[e.to]}
	if l.a == l.b {
		return
	}
	for c := range 3 {
		if e.Set.Info(e.K)[4*c] <= 0 {
			continue
		}
		row := [2][6]float64{r.twist(g.Values.Poses[e.from], l.a, ji[c*r.dim:]), r.twist(g.Values.Poses[e.to], l.b, jj[c*r.dim:])}
		sum := 0.0
		for k := range 6 {
			sum += row[0][k]*row[0][k] + row[1][k]*row[1][k]
		}
		if sum = math.Sqrt(sum); sum > 0 {
			for k := range 6 {
				row[0][k] /= sum
				row[1][k] /= sum
			}
			l.rows = append(l.rows, row)
		}
	}
	r.links = append(r.links, l)
}

func (r *Rigidity) sighting(e *sighted, m *commonMark, g *posegraph.Graph, ji, jj []float64) {
	body := r.Body[e.from]
	for c := range 3 {
		if e.Set.Info(e.K)[4*c] <= 0 {
			continue
		}
		row := sightRow{body: body, twist: r.twist(g.Values.Poses[e.from], body, ji[c*r.dim:])}
		sum := 0.0
		for _, x := range row.twist {
			sum += x * x
		}
		for k := range 3 {
			row.point[k] = jj[3*c+k] * r.metres[body]
			sum += row.point[k] * row.point[k]
		}
		if sum = math.Sqrt(sum); sum > 0 {
			for k := range 6 {
				row.twist[k] /= sum
			}
			for k := range 3 {
				row.point[k] /= sum
			}
			m.rows = append(m.rows, row)
		}
	}
}

// Groups numbers the bodies by what hangs together, in the order of their first body. Out tells what is not to count, a tie of the survey
// or a mark of it, the other being -1; nil counts all.
func (r *Rigidity) Groups(out func(tie, mark int) bool) (group []int32) {
	islands := map[int32][]int32{}
	for b, i := range r.connect {
		islands[i] = append(islands[i], int32(b))
	}
	group = make([]int32, r.Bodies)
	for b := range group {
		group[b] = -1
	}
	next := int32(0)
	for b := range group {
		if group[b] >= 0 {
			continue
		}
		members := islands[r.connect[b]]
		free := r.motions(members, out)
		for i, first := range members {
			if group[first] >= 0 {
				continue
			}
			group[first] = next
			for j := i + 1; j < len(members); j++ {
				if group[members[j]] < 0 && together(free, i, j, r.dim) {
					group[members[j]] = next
				}
			}
			next++
		}
	}
	return group
}

// Islands labels the poses by the groups of their bodies.
func (r *Rigidity) Islands(out func(tie, mark int) bool) []int32 {
	group := r.Groups(out)
	label := make([]int32, len(r.Body))
	for v, b := range r.Body {
		label[v] = group[b]
	}
	return label
}

// motions returns the motions of some bodies that nothing sees, a unit vector in each row; nil stands for one motion of all alike.
func (r *Rigidity) motions(members []int32, out func(tie, mark int) bool) *mat.Dense {
	n := len(members) * r.dim
	if len(members) < 2 || n > widest {
		return nil
	}
	values, u := r.spectrum(members, out)
	free := 0
	for _, x := range values {
		if x < loose {
			free++
		}
	}
	return mat.DenseCopyOf(u.Slice(0, n, 0, free).T())
}

// spectrum returns eigenvalues, ascending, and eigenvectors, in columns, of the normal matrix of some bodies.
func (r *Rigidity) spectrum(members []int32, out func(tie, mark int) bool) ([]float64, *mat.Dense) {
	n := len(members) * r.dim
	place := r.places(members)
	h := mat.NewSymDense(n, nil)
	add := func(i, j int, x float64) { // each of a pair once
		h.SetSym(i, j, h.At(i, j)+x)
	}
	for _, l := range r.links {
		i, mine := place[l.a]
		if !mine || out != nil && out(l.tie, -1) {
			continue
		}
		j := place[l.b]
		for _, row := range l.rows {
			for c := range r.dim {
				for d := range r.dim {
					if c <= d {
						add(i+c, i+d, row[0][c]*row[0][d])
						add(j+c, j+d, row[1][c]*row[1][d])
					}
					add(i+c, j+d, row[0][c]*row[1][d])
				}
			}
		}
	}
	for k := range r.marks {
		m := &r.marks[k]
		if _, mine := place[m.rows[0].body]; mine && (out == nil || !out(-1, m.mark)) {
			r.eliminate(m, place, add)
		}
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(h, true) {
		panic("adjust: a matrix of frames that is not finite")
	}
	var u mat.Dense
	eigen.VectorsTo(&u)
	return eigen.Values(nil), &u
}
func (r *Rigidity) places(members []int32) map[int32]int {
	place := make(map[int32]int, len(members))
	for i, b := range members {
		place[b] = i * r.dim
	}
	return place
}

// Wanted lists the ties of the survey without any one of which frames would be loose: with J the rows of a tie and H the normal matrix
// of all, those for which I - J H^+ J' is singular.
func (r *Rigidity) Wanted() (ties []int) {
	islands := map[int32][]int32{}
	for b, i := range r.connect {
		islands[i] = append(islands[i], int32(b))
	}
	type system struct {
		place map[int32]int
		root  *mat.Dense // columns: eigenvectors over the root of their eigenvalues
	}
	solved := map[int32]*system{}
	for _, l := range r.links {
		island := r.connect[l.a]
		s := solved[island]
		if s == nil {
			s = &system{}
			solved[island] = s
			members := islands[island]
			if n := len(members) * r.dim; n <= widest {
				values, u := r.spectrum(members, nil)
				free := 0
				for c, x := range values {
					if x < loose {
						free = c + 1
						continue
					}
					for i := range n {
						u.Set(i, c, u.At(i, c)/math.Sqrt(x))
					}
				}
				if free < n {
					s.place, s.root = r.places(members), mat.DenseCopyOf(u.Slice(0, n, free, n))
				}
			}
		}
		if s.root != nil && len(l.rows) > 0 && wantedBy(&l, s.place[l.a], s.place[l.b], s.root, r.dim) {
			ties = append(ties, l.tie)
		}
	}
	return ties
}

func wantedBy(l *link, a, b int, root *mat.Dense, dim int) bool {
	n, q := len(l.rows), root.RawMatrix().Cols
	seen := mat.NewDense(n, q, nil)
	for i, row := range l.rows {
		for c := range dim {
			for k := range q {
				seen.Set(i, k, seen.At(i, k)+row[0][c]*root.At(a+c, k)+row[1][c]*root.At(b+c, k))
			}
		}
	}
	left := mat.NewSymDense(n, nil)
	left.SymOuterK(-1, seen)
	for i := range n {
		left.SetSym(i, i, left.At(i, i)+1)
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(left, false) {
		panic("adjust: rows of a tie that are not finite")
	}
	return eigen.Values(nil)[0] < wanted
}

// eliminate adds what a mark says of the bodies that saw it, its own place being free.
func (r *Rigidity) eliminate(m *commonMark, place map[int32]int, add func(i, j int, x float64)) {
	var own [9]float64
	cross := map[int32]*[18]float64{} // twist x point
	var order []int32
	for _, s := range m.rows {
		x := cross[s.body]
		if x == nil {
			x = new([18]float64)
			cross[s.body] = x
			order = append(order, s.body)
		}
		at := place[s.body]
		for c := range r.dim {
			for d := c; d < r.dim; d++ {
				add(at+c, at+d, s.twist[c]*s.twist[d])
			}
			for k := range 3 {
				x[3*c+k] += s.twist[c] * s.point[k]
			}
		}
		for i := range 3 {
			for j := range 3 {
				own[3*i+j] += s.point[i] * s.point[j]
			}
		}
	}
	var eigen mat.EigenSym
	if !eigen.Factorize(mat.NewSymDense(3, own[:]), true) {
		panic("adjust: sightings of a mark that are not finite")
	}
	var u mat.Dense
	eigen.VectorsTo(&u)
	for k, value := range eigen.Values(nil) {
		if value < loose {
			continue
		}
		along := make([][6]float64, len(order))
		for i, b := range order {
			for c := range r.dim {
				for j := range 3 {
					along[i][c] += cross[b][3*c+j] * u.At(j, k)
				}
			}
		}
		for i, a := range order {
			for j, b := range order {
				for c := range r.dim {
					for d := range r.dim {
						if p, q := place[a]+c, place[b]+d; p <= q {
							add(p, q, -along[i][c]*along[j][d]/value)
						}
					}
				}
			}
		}
	}
}

// together tells whether two bodies move alike in all free motions.
func together(free *mat.Dense, i, j, dim int) bool {
	if free == nil {
		return true
	}
	rows, _ := free.Dims()
	sum := 0.0
	for k := range rows {
		for c := range dim {
			d := free.At(k, i*dim+c) - free.At(k, j*dim+c)
			sum += d * d
		}
	}
	return sum < alike
}
