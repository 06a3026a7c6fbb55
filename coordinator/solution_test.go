package coordinator

import (
	"math"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
	"selvage/msgs"
)

// TestCorrectionsAreTheOptimum: the poses of the corrections minimise the sum of summaries and ties, by the gradient, and their
// covariances are the blocks of the dense inverse of the Gauss-Newton matrix with the datum's junction fixed.
func TestCorrectionsAreTheOptimum(t *testing.T) {
	for _, dim := range []int{2, 3} {
		b := newBase(t, dim, nil)
		tracks := []*track{newTrack("r1", 1, 5, dim, 1), newTrack("r2", 1, 4, dim, 2), newTrack("r3", 1, 4, dim, 3)}
		for _, k := range tracks {
			b.summarise(k)
		}
		b.sees(tracks[0], 1, tracks[1], 0)
		b.sees(tracks[0], 4, tracks[1], 3)
		b.sees(tracks[1], 1, tracks[2], 2)
		b.sees(tracks[2], 3, tracks[0], 0)
		b.tick(1)
		for range 3 { // the first solution may leave something to gain
			for _, k := range tracks {
				b.beat(k.robot, nil)
			}
			b.tick(31)
		}
		for _, k := range tracks {
			b.beat(k.robot, nil)
		}
		if !b.Settled() {
			t.Errorf("dimension %d: not settled", dim)
		}
		var parts []msgs.CorrectedPart
		var all []lie.SE3
		base := map[string]int{}
		var terms []term
		for _, k := range tracks {
			base[k.robot] = len(all)
			c, err := msgs.DecodeCorrection(b.robots[k.robot].corr)
			if err != nil {
				t.Fatal(err)
			}
			part := c.Parts[0]
			parts = append(parts, part)
			if c.Epoch != b.Epoch() || c.SummaryVersion != 1 || !part.Joined || part.Island != parts[0].Island {
				t.Errorf("correction %+v", c)
			}
			for i := range part.Poses {
				all = append(all, lie.FromQuat(part.Poses[i].T, part.Poses[i].Q))
			}
			terms = append(terms, cliqueTerms(&b.robots[k.robot].summary.Parts[0], base[k.robot], b.width())...)
		}
		for _, x := range b.order {
			terms = append(terms, tieTerm(x.msg, base, b.width()))
		}
		h, gradient := dense(terms, all, b.width())
		d := b.width()
		free := mat.NewSymDense(len(all)*d-d, nil) // without the first junction of r1
		for i := range free.SymmetricDim() {
			for j := range i + 1 {
				free.SetSym(i, j, h.At(i+d, j+d))
			}
		}
		var cholesky mat.Cholesky
		if !cholesky.Factorize(free) {
			t.Fatal("the joint problem is singular")
		}
		step := mat.NewVecDense(len(gradient)-d, nil)
		if err := cholesky.SolveVecTo(step, mat.NewVecDense(len(gradient)-d, gradient[d:])); err != nil {
			t.Fatal(err)
		}
		if gain := mat.Dot(step, mat.NewVecDense(len(gradient)-d, gradient[d:])) / 2; !(gain < 1e-10) {
			t.Errorf("dimension %d: the corrections leave %g to gain", dim, gain)
		}
		var inverse mat.SymDense
		if err := cholesky.InverseTo(&inverse); err != nil {
			t.Fatal(err)
		}
		q := func(i, j int) float64 { // scalars of all variables
			if i < d || j < d {
				return 0
			}
			return inverse.At(i-d, j-d)
		}
		blocks := 0
		for r, k := range tracks {
			for c, nodes := range parts[r].CovNodes {
				n := d * len(nodes)
				for i := range n {
					for j := range n {
						a, b := d*(base[k.robot]+nodes[i/d])+i%d, d*(base[k.robot]+nodes[j/d])+j%d
						scale := math.Sqrt(q(a, a) * q(b, b))
						if got := parts[r].Cov[c][i*n+j]; math.Abs(got-q(a, b)) > 1e-5*scale {
							t.Fatalf("dimension %d, %s, clique %d (%d, %d): %g, the dense inverse has %g", dim, k.robot, c, i, j, got, q(a, b))
						}
					}
				}
				blocks++
			}
		}
		if blocks != 4+3+3 {
			t.Errorf("%d covariance blocks", blocks)
		}
	}
}

// term is 1/2 r'Wr + b'r over some poses.
type term struct {
	nodes    []int
	residual func(x []lie.SE3) []float64 // of the poses of nodes
	w, b     []float64
}

func cliqueTerms(p *msgs.Part, base, d int) (terms []term) {
	for i := range p.Cliques {
		c := &p.Cliques[i]
		nodes, at := make([]int, len(c.Nodes)), make([]lie.SE3, len(c.Nodes))
		for k, v := range c.Nodes {
			nodes[k], at[k] = base+v, lie.FromQuat(p.Junctions[v].Pose.T, p.Junctions[v].Pose.Q)
		}
		terms = append(terms, term{nodes, func(x []lie.SE3) (r []float64) {
			for k := 1; k < len(x); k++ {
				r = append(r, difference(at[0].Between(at[k]), x[0].Between(x[k]), d)...)
			}
			return r
		}, c.H, c.B})
	}
	return terms
}

func tieTerm(m *msgs.Tie, base map[string]int, d int) term {
	z := lie.FromQuat(m.Pose.T, m.Pose.Q)
	nodes := []int{base[m.From.Robot] + int(m.From.ID/10), base[m.To.Robot] + int(m.To.ID/10)}
	return term{nodes, func(x []lie.SE3) []float64 { return difference(z, x[0].Between(x[1]), d) }, m.Info, make([]float64, d)}
}

// difference is Log(a^-1 b) in the components of the survey.
func difference(a, b lie.SE3, d int) []float64 {
	x := a.Between(b)
	xi := x.Log()
	if d == 3 {
		return []float64{xi[0], xi[1], xi[5]}
	}
	return xi[:]
}

// dense is the Gauss-Newton matrix and the gradient of the terms over the right perturbations of all poses, their Jacobians by
// central differences.
func dense(terms []term, poses []lie.SE3, d int) (*mat.SymDense, []float64) {
	h, gradient := mat.NewSymDense(d*len(poses), nil), make([]float64, d*len(poses))
	component := []int{0, 1, 2, 3, 4, 5}
	if d == 3 {
		component = []int{0, 1, 5}
	}
	for i := range terms {
		q := &terms[i]
		x := make([]lie.SE3, len(q.nodes))
		for k, v := range q.nodes {
			x[k] = poses[v]
		}
		r := q.residual(x)
		n, m := len(r), d*len(x)
		jacobian := mat.NewDense(n, m, nil)
		for c := range m {
			const step = 1e-6
			var xi lie.Tangent
			at := x[c/d]
			xi[component[c%d]] = step
			x[c/d] = at.Mul(lie.Exp(xi))
			up := q.residual(x)
			xi[component[c%d]] = -step
			x[c/d] = at.Mul(lie.Exp(xi))
			down := q.residual(x)
			x[c/d] = at
			for k := range n {
				jacobian.Set(k, c, (up[k]-down[k])/(2*step))
			}
		}
		w := mat.NewDense(n, n, q.w)
		force := mat.NewVecDense(n, slices.Clone(q.b))
		var wr, g mat.VecDense
		wr.MulVec(w, mat.NewVecDense(n, r))
		force.AddVec(force, &wr)
		g.MulVec(jacobian.T(), force)
		var wj, jwj mat.Dense
		wj.Mul(w, jacobian)
		jwj.Mul(jacobian.T(), &wj)
		for a := range m {
			row := d*q.nodes[a/d] + a%d
			gradient[row] += g.AtVec(a)
			for b := range m {
				if column := d*q.nodes[b/d] + b%d; column >= row {
					h.SetSym(row, column, h.At(row, column)+jwj.At(a, b))
				}
			}
		}
	}
	return h, gradient
}
