package posegraph

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"

	"selvage/internal/lie"
	"selvage/internal/sparse"
)

var senses = []Sense{RangeBearing, Range, Bearing, Position}

// measured is what a sensor at x with the given mount tells of p, without error.
func measured(sense Sense, dim int, x, mount lie.SE3, p [3]float64) [3]float64 {
	q := x.Mul(mount).Inv().Apply(p)
	z := [3]float64{math.Hypot(math.Hypot(q[0], q[1]), q[2]), math.Atan2(q[1], q[0]), math.Atan2(q[2], math.Hypot(q[0], q[1]))}
	if sense == Position {
		z = q
	}
	for c, has := range sense.Measures(dim) {
		if !has {
			z[c] = 0
		}
	}
	return z
}

func spot(r *rand.Rand, dim int, metres float64) (p [3]float64) {
	for c := range p {
		p[c] = metres * (2*r.Float64() - 1)
	}
	if dim == 3 {
		p[2] = 0
	}
	return p
}

func info3(r *rand.Rand) *lie.Mat3 {
	m := lie.Mat3(positive(r, 3))
	return &m
}

// The second-order model of one sighting against differences of its residual, for poses, marks and robots.
func TestSightingAgainstDifferences(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			r := random(rapid.Uint64().Draw(t, "seed"))
			sense := rapid.SampledFrom(senses).Draw(t, "sense")
			ofPoint := rapid.Bool().Draw(t, "point")
			g := New(dim, []lie.SE3{turned(r, dim, 10, 3*r.Float64()), turned(r, dim, 10, 3*r.Float64())})
			g.Values.Points = [][3]float64{spot(r, dim, 10)}
			mount, on := turned(r, dim, 1, r.Float64()), spot(r, dim, 1)
			s, to, seen := g.AddSightings(sense), int32(0), g.Values.Points[0]
			if !ofPoint {
				s, to, seen = g.AddEncounters(sense), 1, g.Values.Poses[1].Apply(on)
			}
			z := measured(sense, dim, g.Values.Poses[0], mount, seen)
			for c, has := range sense.Measures(dim) {
				if has {
					z[c] += 0.5 * (2*r.Float64() - 1)
				}
			}
			s.Add(0, to, mount, on, z, info3(r))
			s.W[0] = 0.5 + r.Float64()

			width := dim
			if ofPoint {
				width = 3
			}
			n := dim + width
			residual := func(c int, h float64) [3]float64 {
				v := Values{Poses: append([]lie.SE3(nil), g.Values.Poses...), Points: append([][3]float64(nil), g.Values.Points...)}
				switch {
				case c < dim:
					v.Poses[0] = plus(v.Poses[0], components(dim)[c], h)
				case !ofPoint:
					v.Poses[1] = plus(v.Poses[1], components(dim)[c-dim], h)
				default:
					v.Points[0][c-dim] += h
				}
				return s.Residual(0, &v)
			}
			J := make([][3]float64, n)
			for c := range J {
				if dim == 3 && ofPoint && c == 5 {
					continue
				}
				const h = 1e-6
				a, b := residual(c, h), residual(c, -h)
				for i := range a {
					J[c][i] = math.Remainder(a[i]-b[i], 2*math.Pi) / (2 * h)
				}
			}
			wantH, wantG := make([]float64, n*n), make([]float64, n)
			e := s.Residual(0, &g.Values)
			for i := range n {
				oi := s.Info(0).Apply(J[i])
				for c, v := range oi {
					wantG[i] += s.W[0] * v * e[c]
				}
				for j := range n {
					for c, v := range oi {
						wantH[i*n+j] += s.W[0] * v * J[j][c]
					}
				}
			}
			if dim == 3 && ofPoint {
				wantH[n*n-1] = 1
			}
			h, grad := make([]float64, n*n), make([]float64, n)
			for i := range h {
				h[i] = math.NaN()
			}
			s.Quadratic(0, &g.Values, h, grad)
			near(t, "gradient", grad, wantG, 1e-6, 1)
			near(t, "matrix", h, wantH, 1e-6, 1)
			near(t, "cost", []float64{g.Cost()}, []float64{s.W[0] * s.Chi2(0, &g.Values) / 2}, 1e-12, 1)
		})
	})
}

// A bearing jumps by a turn behind the sensor, and says nothing of what lies within it.
func TestSightingAtTheEdges(t *testing.T) {
	g := New(3, []lie.SE3{lie.Identity()})
	g.Values.Points = [][3]float64{{-3, 0.001, 0}, {}}
	s := g.AddSightings(RangeBearing)
	s.Add(0, 0, lie.Identity(), [3]float64{}, [3]float64{3, -math.Pi + 0.001, 0}, &lie.Mat3{1, 0, 0, 0, 1, 0, 0, 0, 1})
	s.Add(0, 1, lie.Identity(), [3]float64{}, [3]float64{1, 0.2, 0}, &lie.Mat3{1, 0, 0, 0, 1, 0, 0, 0, 1})
	if r := s.Residual(0, &g.Values); math.Abs(r[1]+0.001+0.001/3) > 1e-6 {
		t.Errorf("bearing residual across the jump %g, want %g", r[1], -0.001-0.001/3)
	}
	var h [36]float64
	var grad [6]float64
	s.Quadratic(1, &g.Values, h[:], grad[:])
	for _, v := range append(h[:], grad[:]...) {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			t.Fatalf("a mark in the sensor gives %v and %v", h, grad)
		}
	}
}

// fleetOfMarks is a graph of poses in a chain, marks and robots seen by all senses, without error.
func fleetOfMarks(r *rand.Rand, dim, poses, marks int) (g *Graph, truth Values) {
	for range poses {
		truth.Poses = append(truth.Poses, turned(r, dim, 10, 3*r.Float64()))
	}
	for range marks {
		truth.Points = append(truth.Points, spot(r, dim, 10))
	}
	g = New(dim, append([]lie.SE3(nil), truth.Poses...))
	g.Values.Points = append([][3]float64(nil), truth.Points...)
	chain := g.AddBetween()
	for k := 1; k < poses; k++ {
		info := information(r)
		chain.Add(int32(k-1), int32(k), truth.Poses[k-1].Between(truth.Poses[k]), &info)
	}
	for _, sense := range senses {
		s, e := g.AddSightings(sense), g.AddEncounters(sense)
		for i := range poses {
			mount, on := turned(r, dim, 1, r.Float64()), spot(r, dim, 1)
			p := r.IntN(marks)
			s.Add(int32(i), int32(p), mount, [3]float64{}, measured(sense, dim, truth.Poses[i], mount, truth.Points[p]), info3(r))
			j := (i + 1 + r.IntN(poses-1)) % poses
			e.Add(int32(i), int32(j), mount, on, measured(sense, dim, truth.Poses[i], mount, truth.Poses[j].Apply(on)), info3(r))
		}
	}
	s := g.AddSightings(Position) // so that nothing is left free
	for p := range marks {
		i := p % poses
		s.Add(int32(i), int32(p), lie.Identity(), [3]float64{}, measured(Position, dim, truth.Poses[i], lie.Identity(), truth.Points[p]), info3(r))
	}
	return g, truth
}

// The solver's system is the sum of the factors' models, and from a start near the truth it comes back to it; every variable is
// determined and Joint is the inverse of the whole.
func TestSolverWithPoints(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(7)
		for range 20 {
			g, truth := fleetOfMarks(r, dim, 8, 4)
			near := func() {
				for i := range g.Values.Poses {
					g.Values.Poses[i] = truth.Poses[i].Plus(tangent(r, dim, 0.05, 0.02))
				}
				for p := range g.Values.Points {
					d := spot(r, dim, 0.05)
					for c := range d {
						g.Values.Points[p][c] = truth.Points[p][c] + d[c]
					}
				}
				g.Values.Poses[0] = truth.Poses[0]
			}
			near()
			s, err := NewSolver(g, []int32{0}, sparse.Options{})
			if err != nil {
				t.Fatal(err)
			}
			res := s.Optimise(DefaultOptions())
			if res.Stop != Converged || res.Cost > 1e-15 {
				t.Fatalf("%v, cost %g", res.Stop, res.Cost)
			}
			for i := range truth.Poses {
				e := truth.Poses[i].Between(g.Values.Poses[i])
				if n := e.Log(); math.Abs(n[0])+math.Abs(n[1])+math.Abs(n[5]) > 1e-6 {
					t.Fatalf("pose %d is off by %v", i, n)
				}
			}
			for p := range truth.Points {
				if d := length(minus(truth.Points[p], g.Values.Points[p])); d > 1e-6 {
					t.Fatalf("mark %d is off by %g m", p, d)
				}
			}
			all := make([]int32, 0, 12)
			for v := range int32(g.Variables()) {
				all = append(all, v)
			}
			joint, err := s.Joint(all)
			if err != nil {
				t.Fatal(err)
			}
			m := dim*8 + 3*4
			sigma, err := s.Covariance()
			if err != nil {
				t.Fatal(err)
			}
			for p := range 4 {
				of, o := sigma.Of(g.Point(int32(p))), dim*8+3*p
				for a := range 3 {
					for b := range 3 {
						if w := joint[(o+a)*m+o+b]; math.Abs(w-of[3*a+b]) > 1e-9*(1+math.Abs(w)) {
							t.Fatalf("covariance of mark %d: %g and %g", p, of[3*a+b], w)
						}
					}
				}
			}
		}
	})
}

// A mark that only one range sees is free to turn about the sensor: the solver names it.
func TestUndeterminedMark(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(3)
		g, _ := fleetOfMarks(r, dim, 6, 3)
		x := g.Values.Poses[2].T
		g.Values.Poses[2].R = lie.Identity().R
		g.Values.Points = append(g.Values.Points, [3]float64{x[0] + 3, x[1], x[2]})
		g.AddSightings(Range).Add(2, 3, lie.Identity(), [3]float64{}, [3]float64{2, 0, 0}, &lie.Mat3{1, 0, 0, 0, 1, 0, 0, 0, 1})
		s, err := NewSolver(g, []int32{0}, sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		if res := s.Optimise(DefaultOptions()); res.Stop != Undetermined || res.Weakest != g.Point(3) {
			t.Errorf("%v, weakest variable %d; want undetermined, %d", res.Stop, res.Weakest, g.Point(3))
		}
	})
}

// Control points hold a graph without a fixed pose.
func TestControlPoints(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(11)
		g, truth := fleetOfMarks(r, dim, 8, 4)
		c := g.AddPointPriors()
		if n := len(g.Anchors()); n != 1 {
			t.Fatalf("%d anchors without control, want 1", n)
		}
		for p := range int32(3) {
			c.Add(p, truth.Points[p], info3(r))
		}
		if n := len(g.Anchors()); n != 0 {
			t.Fatalf("%d anchors with control, want none", n)
		}
		move := turned(r, dim, 0.3, 0.1)
		for i := range g.Values.Poses {
			g.Values.Poses[i] = move.Mul(g.Values.Poses[i])
		}
		if un := PlacePoints(g); len(un) > 0 {
			t.Fatalf("marks %v without a place", un)
		}
		solver, err := NewSolver(g, nil, sparse.Options{})
		if err != nil {
			t.Fatal(err)
		}
		if res := solver.Optimise(DefaultOptions()); res.Stop != Converged || res.Cost > 1e-15 {
			t.Fatalf("%v, cost %g", res.Stop, res.Cost)
		}
		for i := range truth.Poses {
			if d := length(minus(truth.Poses[i].T, g.Values.Poses[i].T)); d > 1e-6 {
				t.Fatalf("pose %d is off by %g m", i, d)
			}
		}
	})
}

// Bearings from two places meet in the mark; bearings from one place, or one range, place nothing.
func TestPlacePoints(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(5)
		for range 50 {
			truth := [][3]float64{spot(r, dim, 10), spot(r, dim, 10), spot(r, dim, 10), spot(r, dim, 10)}
			g := New(dim, []lie.SE3{turned(r, dim, 1, 1), turned(r, dim, 1, 2)})
			g.Values.Poses[0].T[0] += 40
			g.Values.Poses[1].T[1] += 40
			g.Values.Points = make([][3]float64, 4)
			mount, one := turned(r, dim, 1, 1), &lie.Mat3{1, 0, 0, 0, 1, 0, 0, 0, 1}
			bearing, ranged, whole := g.AddSightings(Bearing), g.AddSightings(Range), g.AddSightings(RangeBearing)
			add := func(s *Sightings, from, to int32) {
				s.Add(from, to, mount, [3]float64{}, measured(s.Sense(), dim, g.Values.Poses[from], mount, truth[to]), one)
			}
			add(bearing, 0, 0)
			add(bearing, 1, 0)
			add(bearing, 0, 1)
			add(ranged, 0, 2)
			add(whole, 1, 3)
			un := PlacePoints(g)
			if len(un) != 2 || un[0] != 1 || un[1] != 2 {
				t.Fatalf("without a place: %v, want 1 and 2", un)
			}
			for _, p := range []int{0, 3} {
				if d := length(minus(truth[p], g.Values.Points[p])); d > 1e-9 {
					t.Fatalf("mark %d is off by %g m", p, d)
				}
			}
		}
	})
}

// The predicted covariance is J Sigma J' with J by differences and Sigma the joint covariance, and the innovation follows from it.
func TestPredictedSighting(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(21)
		for range 10 {
			g, _ := fleetOfMarks(r, dim, 8, 4)
			s, err := NewSolver(g, []int32{3}, sparse.Options{})
			if err != nil {
				t.Fatal(err)
			}
			sigma, err := s.Covariance()
			if err != nil {
				t.Fatal(err)
			}
			for _, set := range g.Sets {
				e, ok := set.(*Sightings)
				if !ok {
					continue
				}
				for k := range e.From {
					got := e.Predicted(k, &g.Values, sigma)
					variables := []int32{e.From[k], e.target(k)}
					joint, err := s.Joint(variables)
					if err != nil {
						t.Fatal(err)
					}
					n := dim + g.width(variables[1])
					J := mat.NewDense(3, n, nil)
					for c := range n {
						const h = 1e-6
						move := func(h float64) [3]float64 {
							v := Values{Poses: append([]lie.SE3(nil), g.Values.Poses...), Points: append([][3]float64(nil), g.Values.Points...)}
							switch {
							case c < dim:
								v.Poses[variables[0]] = plus(v.Poses[variables[0]], components(dim)[c], h)
							case !e.ofPoints:
								v.Poses[variables[1]] = plus(v.Poses[variables[1]], components(dim)[c-dim], h)
							case dim == 6 || c < dim+2:
								v.Points[e.To[k]][c-dim] += h
							}
							return e.Residual(k, &v)
						}
						a, b := move(h), move(-h)
						for i := range a {
							J.Set(i, c, math.Remainder(a[i]-b[i], 2*math.Pi)/(2*h))
						}
					}
					var js, want mat.Dense
					js.Mul(J, mat.NewDense(n, n, joint))
					want.Mul(&js, J.T())
					near(t, "predicted covariance", got[:], want.RawMatrix().Data, 1e-5, 1)

					var at []int
					for i := range 3 {
						if e.Info(k)[4*i] > 0 {
							at = append(at, i)
						}
					}
					m, info := mat.NewDense(len(at), len(at), nil), mat.NewDense(len(at), len(at), nil)
					e.Z[k][at[0]] += 0.3
					res := mat.NewVecDense(len(at), nil)
					z := e.Residual(k, &g.Values)
					for i, a := range at {
						res.SetVec(i, z[a])
						for j, b := range at {
							m.Set(i, j, got[3*a+b])
							info.Set(i, j, e.Info(k)[3*a+b])
						}
					}
					var own mat.Dense
					if err := own.Inverse(info); err != nil {
						t.Fatal(err)
					}
					m.Add(m, &own)
					var x mat.VecDense
					if err := x.SolveVec(m, res); err != nil {
						t.Fatal(err)
					}
					near(t, "innovation", []float64{e.Innovation(k, &g.Values, sigma)}, []float64{mat.Dot(res, &x)}, 1e-9, 1)
					e.Z[k][at[0]] -= 0.3
				}
			}
		}
	})
}

// Ranges from views that do not stand in line place a mark.
func TestPlacePointsByRanges(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(6)
		g := New(dim, nil)
		views := 2 + dim/3
		for k := range views {
			x := turned(r, dim, 1, 1)
			if k < 2 {
				x.T[k] += 20
			} else if dim == 6 {
				x.T[2] += 20 * float64(k-2)
			}
			g.Values.Poses = append(g.Values.Poses, x)
		}
		truth := [][3]float64{spot(r, dim, 10), spot(r, dim, 10)}
		g.Values.Points = make([][3]float64, 2)
		mount, s := turned(r, dim, 1, 1), g.AddSightings(Range)
		for k := range views {
			for p, at := range truth {
				if p == 1 && k == views-1 {
					continue // one view too few
				}
				s.Add(int32(k), int32(p), mount, [3]float64{}, measured(Range, dim, g.Values.Poses[k], mount, at), &lie.Mat3{1})
			}
		}
		un := PlacePoints(g)
		if d := length(minus(truth[0], g.Values.Points[0])); d > 1e-9 || len(un) != 1 || un[0] != 1 {
			t.Errorf("off by %g m; without a place: %v", d, un)
		}
	})
}

// Two ranges never place a mark, wherever from: what their matrix, of rank one, leaves of a determinant is rounding.
func TestTwoRangesPlaceNothing(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		r := random(7)
		for range 200 {
			g := New(dim, []lie.SE3{turned(r, dim, 5, 1), turned(r, dim, 5, 1)})
			g.Values.Points = make([][3]float64, 1)
			s := g.AddSightings(Range)
			for k := range int32(2) {
				s.Add(k, 0, lie.Identity(), [3]float64{}, [3]float64{15 + r.Float64()}, &lie.Mat3{1})
			}
			if un := PlacePoints(g); len(un) != 1 {
				t.Fatalf("placed at %v", g.Values.Points[0])
			}
		}
	})
}
