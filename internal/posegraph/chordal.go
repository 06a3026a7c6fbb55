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
//     The three rows of R are independent unknowns with one and the same matrix.
//  2. Positions, minimising sum (R_i'(t_j - t_i) - t_ij)' Omega_tt (same).
//
// Every component of the graph needs a fixed pose. Measurements that say nothing about rotation get a vanishing weight there.
func Chordal(g *Graph, fixed []int32) error {
	linear := New(3, g.Values.Poses) // three scalars a pose, whatever the dimension
	rotation, position := &rotationRows{}, &positions{}
	for _, s := range g.Sets {
		b, ok := s.(*Between)
		if !ok {
			continue
		}
		rotation.add(b)
		position.sets = append(position.sets, b)
	}
	linear.Sets = []FactorSet{rotation}
	s, err := NewSolver(linear, fixed, sparse.Options{})
	if err != nil {
		return err
	}
	if len(s.variable) == 0 {
		return nil
	}
	if err := rotation.solve(s); err != nil {
		return fmt.Errorf("chordal start, rotations: %w", err)
	}
	position.rotation = rotation
	if err := position.solve(s); err != nil {
		return fmt.Errorf("chordal start, positions: %w", err)
	}
	if g.Dim == 3 {
		for i := range g.Values.Poses {
			flatten(&g.Values.Poses[i])
		}
	}
	return nil
}

// flatten removes what rounding put outside the plane.
func flatten(x *lie.SE3) {
	n := math.Hypot(x.R[0], x.R[3])
	*x = lie.SE2{X: x.T[0], Y: x.T[1], C: x.R[0] / n, S: x.R[3] / n}.Spatial()
}

// rotationRows is the linear problem of step 1. For one row of the rotations, as vectors r: r_j = R_ij' r_i.
type rotationRows struct {
	sets   []*Between
	weight []float64
	slots  []Slot
}

func (p *rotationRows) add(b *Between) {
	p.sets = append(p.sets, b)
	for k := range b.I {
		p.weight = append(p.weight, b.W[k]*rotationWeight(b, k))
	}
}

// rotationWeight returns kappa = 3/(2 tr C), C the covariance of the rotation alone; in the plane the information itself.
func rotationWeight(b *Between, k int) float64 {
	o := b.Info(k)
	if b.dim == 3 {
		return math.Max(o[8], 1e-12)
	}
	m := lie.Mat3{o[21], o[22], o[23], o[27], o[28], o[29], o[33], o[34], o[35]}
	c00, c11, c22 := m[4]*m[8]-m[5]*m[5], m[0]*m[8]-m[2]*m[2], m[0]*m[4]-m[1]*m[1]
	det := m[0]*c00 - m[1]*(m[1]*m[8]-m[5]*m[2]) + m[2]*(m[1]*m[5]-m[4]*m[2])
	if kappa := 1.5 * det / (c00 + c11 + c22); kappa > 1e-12 {
		return kappa
	}
	return 1e-12
}

func (p *rotationRows) Couplings(emit func(i, j int32)) {
	for _, b := range p.sets {
		b.Couplings(emit)
	}
}

func (p *rotationRows) Bind(next func() Slot) {
	p.slots = make([]Slot, len(p.weight))
	for k := range p.slots {
		p.slots[k] = next()
	}
}

func (p *rotationRows) Cost(*Values) float64                 { panic("posegraph: a start has no cost") }
func (p *rotationRows) Linearise(*Values, *Assembly) float64 { panic("posegraph: a start has no cost") }

// solve writes the rotations of all variables of s.
func (p *rotationRows) solve(s *Solver) error {
	a, n := s.now, len(s.step)
	a.Matrix.Zero()
	poses := s.g.Values.Poses
	rhs := make([]float64, 3*n) // one column for each row of R
	e := 0
	for _, b := range p.sets {
		for k := range b.I {
			w, z := p.weight[e], &b.Z[k].R
			i, j := b.I[k], b.J[k]
			oi, oj := s.offset[i], s.offset[j]
			if d := a.Diag(i); d != nil {
				d[0] += w
				d[4] += w
				d[8] += w
				if oj < 0 { // r_i = R_ij r_j
					m := z.Mul(poses[j].R.T())
					for row := 0; row < 3; row++ {
						for c := 0; c < 3; c++ {
							rhs[row*n+int(oi)+c] += w * m[3*c+row]
						}
					}
				}
			}
			if d := a.Diag(j); d != nil {
				d[0] += w
				d[4] += w
				d[8] += w
				if oi < 0 {
					m := poses[i].R.Mul(*z)
					for row := 0; row < 3; row++ {
						for c := 0; c < 3; c++ {
							rhs[row*n+int(oj)+c] += w * m[3*row+c]
						}
					}
				}
			}
			switch t := p.slots[e]; { // block (i, j) is -w R_ij
			case t > 0:
				d := a.Matrix.Off(int(t - 1))
				for q := range z {
					d[q] -= w * z[q]
				}
			case t < 0:
				d := a.Matrix.Off(int(-t - 1))
				m := z.T()
				for q := range m {
					d[q] -= w * m[q]
				}
			}
			e++
		}
	}
	if err := s.factor.Factorise(a.Matrix); err != nil {
		return err
	}
	s.factor.SolveMany(rhs, 3)
	for _, v := range s.variable {
		o := int(s.offset[v])
		var m lie.Mat3
		for row := 0; row < 3; row++ {
			copy(m[3*row:3*row+3], rhs[row*n+o:])
		}
		r, _ := lie.NearestRotation(&m)
		poses[v].R = r
	}
	return nil
}

// positions is the linear problem of step 2, on the slots of step 1.
type positions struct {
	sets     []*Between
	rotation *rotationRows
}

func (p *positions) solve(s *Solver) error {
	a := s.now
	a.Matrix.Zero()
	clear(a.Gradient)
	poses := s.g.Values.Poses
	e := 0
	for _, b := range p.sets {
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
			if t := p.rotation.slots[e]; t != 0 {
				d := a.Matrix.Off(int(max(t, -t)) - 1) // symmetric
				for q := range m {
					d[q] -= m[q]
				}
			}
			e++
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
