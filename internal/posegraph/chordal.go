package posegraph

import (
	"fmt"
	"math"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

// Chordal sets the values of all poses that are not fixed from the relative poses alone, rotations first (Carlone, Tron,
// Daniilidis, Dellaert, "Initialization techniques for 3D SLAM: a survey on rotation estimation and its use in pose graph
// optimization", ICRA 2015): two linear least-squares problems, no present value used but those of the fixed poses.
//
//  1. Rotations as free 3 x 3 matrices, minimising sum kappa |R_j - R_i R_ij|^2, each then replaced by the nearest rotation.
//     The three rows of R are independent unknowns with one and the same matrix; in the plane one row says it all.
//  2. Positions, minimising sum (R_i'(t_j - t_i) - t_ij)' Omega_tt (same).
//
// Every component of the graph needs a fixed pose. Measurements that say nothing about rotation get a vanishing weight there.
func Chordal(g *Graph, fixed []int32) error {
	linear := New(3, g.Values.Poses) // three scalars a pose, whatever the dimension
	for _, s := range g.Sets {
		if b, ok := s.(*Between); ok {
			own := *b // with slots of its own
			linear.Sets = append(linear.Sets, &own)
		}
	}
	s, err := NewSolver(linear, fixed, sparse.Options{})
	if err != nil {
		return err
	}
	return s.chordal(g.Dim)
}

// Chordal is [Chordal] for the graph and the fixed variables of s. In the plane the structure of s serves the start as well, unless
// there are points.
func (s *Solver) Chordal() error {
	if s.g.Dim == 3 && len(s.g.Values.Points) == 0 {
		return s.chordal(3)
	}
	var fixed []int32
	for v, b := range s.block[:len(s.g.Values.Poses)] {
		if b < 0 {
			fixed = append(fixed, int32(v))
		}
	}
	return Chordal(s.g, fixed)
}

// chordal sets the values of a graph whose variables have three scalars; its poses are of the dimension dim.
func (s *Solver) chordal(dim int) error {
	if len(s.variable) == 0 {
		return nil
	}
	rotations := s.rotations
	if dim == 3 {
		rotations = s.headings
	}
	if err := rotations(); err != nil {
		return fmt.Errorf("chordal start, rotations: %w", err)
	}
	if err := s.positions(); err != nil {
		return fmt.Errorf("chordal start, positions: %w", err)
	}
	if dim == 3 {
		for _, v := range s.variable {
			flatten(&s.g.Values.Poses[v])
		}
	}
	return nil
}

// flatten removes what rounding put outside the plane.
func flatten(x *lie.SE3) {
	n := math.Hypot(x.R[0], x.R[3])
	*x = lie.SE2{X: x.T[0], Y: x.T[1], C: x.R[0] / n, S: x.R[3] / n}.Spatial()
}

// rotationWeight returns the weight times kappa = 3/(2 tr C), C the covariance of the rotation alone; in the plane the information
// itself.
func rotationWeight(b *Between, k int) float64 {
	o := b.Info(k)
	if b.dim == 3 {
		return b.W[k] * math.Max(o[8], 1e-12)
	}
	m := lie.Mat3{o[21], o[22], o[23], o[27], o[28], o[29], o[33], o[34], o[35]}
	c00, c11, c22 := m[4]*m[8]-m[5]*m[5], m[0]*m[8]-m[2]*m[2], m[0]*m[4]-m[1]*m[1]
	det := m[0]*c00 - m[1]*(m[1]*m[8]-m[5]*m[2]) + m[2]*(m[1]*m[5]-m[4]*m[2])
	if kappa := 1.5 * det / (c00 + c11 + c22); kappa > 1e-12 {
		return b.W[k] * kappa
	}
	return b.W[k] * 1e-12
}

// rotations solves step 1 in space. For one row of the rotations, as vectors r: r_j = R_ij' r_i.
func (s *Solver) rotations() error {
	rhs := make([]float64, 3*len(s.step)) // one column for each row of R
	s.rotationSystem(func(o int32, w float64, m *lie.Mat3) {
		for row := 0; row < 3; row++ {
			for c := 0; c < 3; c++ {
				rhs[row*len(s.step)+int(o)+c] += w * m[3*row+c]
			}
		}
	})
	if err := s.factor.Factorise(s.now.Matrix); err != nil {
		return err
	}
	s.factor.SolveMany(rhs, 3)
	for _, v := range s.variable {
		o := int(s.offset[v])
		var m lie.Mat3
		for row := 0; row < 3; row++ {
			copy(m[3*row:3*row+3], rhs[row*len(s.step)+o:])
		}
		r, _ := lie.NearestRotation(&m)
		s.g.Values.Poses[v].R = r
	}
	return nil
}

// headings solves step 1 in the plane: the first row is (c, -s, 0), the second follows from it.
func (s *Solver) headings() error {
	clear(s.now.Gradient)
	s.rotationSystem(func(o int32, w float64, m *lie.Mat3) {
		s.now.Gradient[o] += w * m[0]
		s.now.Gradient[o+1] += w * m[1]
	})
	if err := s.factor.FactoriseSolve(s.now.Matrix, s.now.Gradient, s.step); err != nil {
		return err
	}
	for _, v := range s.variable {
		x := lie.SE2{C: 1}
		c, minus := s.step[s.offset[v]], s.step[s.offset[v]+1]
		if n := math.Hypot(c, minus); n > 0 {
			x.C, x.S = c/n, -minus/n
		}
		s.g.Values.Poses[v].R = x.Spatial().R
	}
	return nil
}

// rotationSystem fills the matrix of step 1 and reports what fixed poses add to the right-hand side: for a variable with its first scalar
// the weight and the rotation that the measurement gives it.
func (s *Solver) rotationSystem(known func(offset int32, w float64, r *lie.Mat3)) {
	a := s.now
	a.Matrix.Zero()
	poses := s.g.Values.Poses
	for _, set := range s.g.Sets {
		b, ok := set.(*Between)
		if !ok {
			continue
		}
		for k := range b.I {
			w, z := rotationWeight(b, k), &b.Z[k].R
			i, j := b.I[k], b.J[k]
			di, dj := a.Diag(i), a.Diag(j)
			if di != nil {
				addScaled(di, w)
				if dj == nil {
					m := poses[j].R.Mul(z.T())
					known(s.offset[i], w, &m)
				}
			}
			if dj != nil {
				addScaled(dj, w)
				if di == nil {
					m := poses[i].R.Mul(*z)
					known(s.offset[j], w, &m)
				}
			}
			switch t := b.slots[k]; { // block (i, j) is -w R_ij
			case t > 0:
				d := (*[9]float64)(a.Matrix.Off(int(t - 1)))
				for q := range z {
					d[q] -= w * z[q]
				}
			case t < 0:
				d := (*[9]float64)(a.Matrix.Off(int(-t - 1)))
				m := z.T()
				for q := range m {
					d[q] -= w * m[q]
				}
			}
		}
	}
}

// addScaled adds w times the identity.
func addScaled(d []float64, w float64) {
	d[0] += w
	d[4] += w
	d[8] += w
}

// positions solves step 2.
func (s *Solver) positions() error {
	a := s.now
	a.Matrix.Zero()
	clear(a.Gradient)
	poses := s.g.Values.Poses
	for _, set := range s.g.Sets {
		b, ok := set.(*Between)
		if !ok {
			continue
		}
		for k := range b.I {
			i, j := b.I[k], b.J[k]
			m := positionInfo(b, k, &poses[i].R) // R_i Omega_tt R_i'
			t := poses[i].R.Apply(b.Z[k].T)      // measured t_j - t_i in the datum
			di, dj := a.Diag(i), a.Diag(j)
			if di == nil {
				for c := range t {
					t[c] += poses[i].T[c]
				}
			}
			if dj == nil {
				for c := range t {
					t[c] -= poses[j].T[c]
				}
			}
			v := m.Apply(t)
			if di != nil {
				add9(di, &m)
				g := a.Grad(i)
				for c := range v {
					g[c] -= v[c]
				}
			}
			if dj != nil {
				add9(dj, &m)
				add3(a.Grad(j), &v)
			}
			if t := b.slots[k]; t != 0 {
				d := (*[9]float64)(a.Matrix.Off(int(max(t, -t)) - 1)) // symmetric
				for q := range m {
					d[q] -= m[q]
				}
			}
		}
	}
	if err := s.factor.FactoriseSolve(a.Matrix, a.Gradient, s.step); err != nil {
		return err
	}
	for _, v := range s.variable {
		copy(poses[v].T[:], s.step[s.offset[v]:])
	}
	return nil
}

// positionInfo returns w R Omega_tt R'. In the plane z is given the weight of x and y together, it stays zero.
func positionInfo(b *Between, k int, r *lie.Mat3) lie.Mat3 {
	o := b.Info(k)
	w := b.W[k]
	var m lie.Mat3
	if b.dim == 3 {
		m = lie.Mat3{w * o[0], w * o[1], 0, w * o[3], w * o[4], 0, 0, 0, w * (o[0] + o[4])}
	} else {
		m = lie.Mat3{w * o[0], w * o[1], w * o[2], w * o[6], w * o[7], w * o[8], w * o[12], w * o[13], w * o[14]}
	}
	return r.Mul(m).Mul(r.T())
}
