package evidence

import (
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/mat"

	"selvage/internal/lie"
)

// The simulated fleet: robots roam the aisles of a site, each with odometry of .01 m and .1 degrees per keyframe of half a metre
// and a heading bias of .05 degrees per keyframe that its covariance does not know of, and with loop closures where it comes
// back to its own track. Every third keyframe is a node. Each unit's map is the optimum of its own pose graph.

const (
	keyframe = 0.5
	stride   = 3
	spacing  = 8.0 // of the aisles
	deg      = math.Pi / 180
)

type simFleet struct {
	dim   int
	truth [][]lie.SE3
	units []Unit
}

type simTie struct {
	Tie
	true bool
}

func simulate(rng *rand.Rand, dim, robots, nodes int, side, biasDeg float64) simFleet {
	s := simFleet{dim: dim}
	cols := int(side/spacing) + 1
	for r := 0; r < robots; r++ {
		truth := roam(rng, dim, cols, nodes)
		s.truth = append(s.truth, truth)
		u := mapOf(rng, dim, truth, biasDeg)
		u.Name = "r" + string(rune('A'+r))
		s.units = append(s.units, u)
	}
	return s
}

// roam walks the streets of a square grid.
func roam(rng *rand.Rand, dim, cols, nodes int) []lie.SE3 {
	x, y := float64(rng.IntN(cols))*spacing, float64(rng.IntN(cols))*spacing
	yaw := float64(rng.IntN(4)) * math.Pi / 2
	var out []lie.SE3
	wx, wy := 0.0, 0.0
	for len(out) < nodes {
		// Turn at a crossing, never back and never out of the site.
		for {
			next := yaw + float64(rng.IntN(3)-1)*math.Pi/2
			nx, ny := x+spacing*math.Cos(next), y+spacing*math.Sin(next)
			if nx > -1 && ny > -1 && nx < float64(cols)*spacing-1 && ny < float64(cols)*spacing-1 {
				yaw = next
				break
			}
			if rng.IntN(4) == 0 {
				yaw += math.Pi
			}
		}
		step := keyframe * stride
		for d := 0.0; d < spacing && len(out) < nodes; d += step {
			wx, wy = 0.8*wx+0.2*rng.NormFloat64(), 0.8*wy+0.2*rng.NormFloat64()
			p := lie.SE3{R: lie.ExpSO3([3]float64{0, 0, yaw + 0.1*rng.NormFloat64()}), T: [3]float64{x + d*math.Cos(yaw) + wx, y + d*math.Sin(yaw) + wy, 0}}
			if dim == 3 {
				p.T[2] = math.Sin(p.T[0]/20) + 0.1*rng.NormFloat64()
				p.R = p.R.Mul(lie.ExpSO3([3]float64{0.03 * rng.NormFloat64(), 0.03 * rng.NormFloat64(), 0}))
			}
			out = append(out, p)
		}
		x, y = x+spacing*math.Cos(yaw), y+spacing*math.Sin(yaw)
		x, y = math.Round(x/spacing)*spacing, math.Round(y/spacing)*spacing
	}
	return out
}

type simEdge struct {
	i, j int
	z    lie.SE3
	s    [6]float64 // sigmas
}

func noise(rng *rand.Rand, dim int, s [6]float64) (xi lie.Tangent) {
	for k := range xi {
		if dim == 3 || k < 2 || k == 5 {
			xi[k] = s[k] * rng.NormFloat64()
		}
	}
	return xi
}

func sigmas(m, rad float64) [6]float64 { return [6]float64{m, m, m, rad, rad, rad} }

// mapOf measures a track and adjusts the measurements.
func mapOf(rng *rand.Rand, dim int, truth []lie.SE3, biasDeg float64) Unit {
	n := len(truth)
	var edges []simEdge
	root := math.Sqrt(stride)
	odo := sigmas(.01*root, .1*deg*root)
	travel := make([]float64, n)
	for k := 1; k < n; k++ {
		z := truth[k-1].Between(truth[k])
		travel[k] = travel[k-1] + math.Hypot(z.T[0], math.Hypot(z.T[1], z.T[2]))
		xi := noise(rng, dim, odo)
		xi[5] += biasDeg * deg * stride
		edges = append(edges, simEdge{k - 1, k, z.Mul(lie.Exp(xi)), odo})
	}
	loop := sigmas(.05, .5*deg)
	for k, last := 0, 0; k < n; k++ { // at most one closure in 6 nodes, over at least 20
		if k-last < 6 {
			continue
		}
		for m := 0; m < k-20; m++ {
			if distance(truth[k].T, truth[m].T) < 2 {
				z := truth[m].Between(truth[k]).Mul(lie.Exp(noise(rng, dim, loop)))
				edges = append(edges, simEdge{m, k, z, loop})
				last = k
				break
			}
		}
	}
	x := make([]lie.SE3, n)
	x[0] = lie.Identity()
	for k := 1; k < n; k++ {
		x[k] = x[k-1].Mul(edges[k-1].z)
	}
	d := 6
	if dim == 2 {
		d = 3
	}
	inv := adjust(x, edges, dim, d)
	return Unit{Poses: x, TravelM: travel, Covariance: marginals(x, inv, dim, d)}
}

var planar = [6]int{0, 1, 5, 0, 0, 0}

// adjust brings x to the optimum of the edges with x[0] fixed and returns the covariance of the others.
func adjust(x []lie.SE3, edges []simEdge, dim, d int) *mat.SymDense {
	n := len(x) - 1
	index := [6]int{0, 1, 2, 3, 4, 5}
	if dim == 2 {
		index = planar
	}
	var ch mat.Cholesky
	for it := 0; it < 4; it++ {
		h := mat.NewSymDense(n*d, nil)
		g := make([]float64, n*d)
		for _, e := range edges {
			pred := x[e.i].Between(x[e.j])
			m := e.z.Between(pred)
			r := m.Log()
			jj := lie.JrInv(r)
			inv := pred.Inv()
			ad := inv.Adjoint()
			var ji [36]float64
			for a := 0; a < 6; a++ {
				for b := 0; b < 6; b++ {
					for k := 0; k < 6; k++ {
						ji[6*a+b] -= jj[6*a+k] * ad[6*k+b]
					}
				}
			}
			side := [2]struct {
				v int
				j *[36]float64
			}{{e.i - 1, &ji}, {e.j - 1, &jj}}
			for _, p := range side {
				if p.v < 0 {
					continue
				}
				for a := 0; a < d; a++ {
					for k := 0; k < d; k++ {
						s := e.s[index[k]]
						g[p.v*d+a] += p.j[6*index[k]+index[a]] * r[index[k]] / (s * s)
					}
				}
				for _, q := range side {
					if q.v < 0 {
						continue
					}
					for a := 0; a < d; a++ {
						for b := 0; b < d; b++ {
							if q.v*d+b < p.v*d+a {
								continue
							}
							sum := 0.0
							for k := 0; k < d; k++ {
								s := e.s[index[k]]
								sum += p.j[6*index[k]+index[a]] * q.j[6*index[k]+index[b]] / (s * s)
							}
							h.SetSym(p.v*d+a, q.v*d+b, h.At(p.v*d+a, q.v*d+b)+sum)
						}
					}
				}
			}
		}
		if !ch.Factorize(h) {
			panic("simulated graph is singular")
		}
		var dx mat.VecDense
		if err := ch.SolveVecTo(&dx, mat.NewVecDense(n*d, g)); err != nil {
			panic(err)
		}
		for v := 0; v < n; v++ {
			var xi lie.Tangent
			for a := 0; a < d; a++ {
				xi[index[a]] = -dx.AtVec(v*d + a)
			}
			x[v+1] = x[v+1].Plus(xi)
		}
	}
	var inv mat.SymDense
	if err := ch.InverseTo(&inv); err != nil {
		panic(err)
	}
	return &inv
}

// marginals gives the covariances of relative poses: S_jj - A S_ij - S_ji A' + A S_ii A', A = Ad(P^-1).
func marginals(x []lie.SE3, inv *mat.SymDense, dim, d int) func(i, j int) [36]float64 {
	index := [6]int{0, 1, 2, 3, 4, 5}
	if dim == 2 {
		index = planar
	}
	block := func(i, j int, m *[36]float64) {
		if i == 0 || j == 0 {
			return
		}
		raw := inv.RawSymmetric()
		for a := 0; a < d; a++ {
			for b := 0; b < d; b++ {
				p, q := (i-1)*d+a, (j-1)*d+b
				m[6*index[a]+index[b]] = raw.Data[min(p, q)*raw.Stride+max(p, q)]
			}
		}
	}
	mul := func(x, y *[36]float64, transposed bool) (z [36]float64) {
		for a := 0; a < 6; a++ {
			for k := 0; k < 6; k++ {
				v := x[6*a+k]
				if v == 0 {
					continue
				}
				for b := 0; b < 6; b++ {
					if transposed {
						z[6*a+b] += v * y[6*b+k]
					} else {
						z[6*a+b] += v * y[6*k+b]
					}
				}
			}
		}
		return z
	}
	return func(i, j int) (out [36]float64) {
		p := x[j].Between(x[i]) // P^-1
		ad := p.Adjoint()
		var ii, ij [36]float64
		block(i, i, &ii)
		block(i, j, &ij)
		block(j, j, &out)
		t := mul(&ad, &ij, false)
		u := mul(&ad, &ii, false)
		u = mul(&u, &ad, true)
		for a := 0; a < 6; a++ {
			for b := 0; b < 6; b++ {
				out[6*a+b] += u[6*a+b] - t[6*a+b] - t[6*b+a]
			}
		}
		return out
	}
}

func (s *simFleet) measure(rng *rand.Rand, i, j End, pose lie.SE3, ok bool) simTie {
	sg := sigmas(.05, .5*deg)
	var c [36]float64
	for k := range sg {
		if s.dim == 3 || k < 2 || k == 5 {
			c[7*k] = sg[k] * sg[k]
		}
	}
	t := simTie{Tie{From: i, To: j, Z: pose.Mul(lie.Exp(noise(rng, s.dim, sg))), Cov: c}, ok}
	if rng.IntN(2) == 0 {
		z := t.Z.Inv()
		t.From, t.To, t.Z = t.To, t.From, z // covariances are isotropic enough for a test
	}
	return t
}

// trueTies draws up to 10 to 40 ties of each pair of robots that have been within 3 m of each other's track.
func (s *simFleet) trueTies(rng *rand.Rand) (out []simTie) {
	for a := range s.units {
		for b := a + 1; b < len(s.units); b++ {
			var near [][2]int
			for i := range s.truth[a] {
				for j := range s.truth[b] {
					if distance(s.truth[a][i].T, s.truth[b][j].T) < 3 {
						near = append(near, [2]int{i, j})
					}
				}
			}
			if len(near) < 10 {
				continue
			}
			rng.Shuffle(len(near), func(x, y int) { near[x], near[y] = near[y], near[x] })
			for _, p := range near[:min(len(near), 10+rng.IntN(31))] {
				i, j := End{a, p[0]}, End{b, p[1]}
				out = append(out, s.measure(rng, i, j, s.truth[a][p[0]].Between(s.truth[b][p[1]]), true))
			}
		}
	}
	return out
}

func (s *simFleet) randomPair(rng *rand.Rand) (int, int) {
	a := rng.IntN(len(s.units))
	b := rng.IntN(len(s.units) - 1)
	if b >= a {
		b++
	}
	return a, b
}

func (s *simFleet) wild(rng *rand.Rand) lie.SE3 {
	xi := lie.Tangent{2 * rng.NormFloat64(), 2 * rng.NormFloat64(), 0, 0, 0, (2*rng.Float64() - 1) * math.Pi}
	if s.dim == 3 {
		xi[2] = 0.2 * rng.NormFloat64()
	}
	return lie.Exp(xi)
}

// independent adds false ties, each wrong in its own way, until they are the given part of all.
func (s *simFleet) independent(rng *rand.Rand, ties []simTie, part float64) []simTie {
	want := int(part / (1 - part) * float64(len(ties)))
	for k := 0; k < want; k++ {
		a, b := s.randomPair(rng)
		i, j := End{a, rng.IntN(len(s.truth[a]))}, End{b, rng.IntN(len(s.truth[b]))}
		ties = append(ties, s.measure(rng, i, j, s.wild(rng), false))
	}
	return ties
}

// clustered adds false ties that agree with each other: runs of look-alike nodes, and every third time an aisle taken for its
// neighbour or for itself from the other end.
func (s *simFleet) clustered(rng *rand.Rand, ties []simTie, part float64) []simTie {
	want := int(part / (1 - part) * float64(len(ties)))
	end := len(ties) + want
	for cluster := 0; len(ties) < end; cluster++ {
		a, b := s.randomPair(rng)
		var wrong lie.SE3 // what the truth of b is moved by
		size := 3 + rng.IntN(4)
		i0, j0 := rng.IntN(len(s.truth[a])), rng.IntN(len(s.truth[b]))
		reach := 6 * keyframe * stride
		if cluster%3 == 2 {
			wrong = lie.Identity()
			wrong.T[rng.IntN(2)] = spacing * float64(1-2*rng.IntN(2))
			size, reach = 5+rng.IntN(8), 20
			if rng.IntN(2) == 0 {
				wrong.R = lie.ExpSO3([3]float64{0, 0, math.Pi})
				wrong.T[0] += 2 * s.truth[a][i0].T[0]
				wrong.T[1] += 2 * s.truth[a][i0].T[1]
			}
		} else {
			wrong = s.truth[a][i0].Mul(s.wild(rng)).Mul(s.truth[b][j0].Inv())
		}
		var near [][2]int
		for i := range s.truth[a] {
			for j := range s.truth[b] {
				p := s.truth[a][i].Between(wrong.Mul(s.truth[b][j]))
				if math.Hypot(p.T[0], p.T[1]) < 4 && distance(s.truth[a][i].T, s.truth[a][i0].T) < reach {
					near = append(near, [2]int{i, j})
				}
			}
		}
		rng.Shuffle(len(near), func(x, y int) { near[x], near[y] = near[y], near[x] })
		for _, p := range near[:min(len(near), size, end-len(ties))] {
			i, j := End{a, p[0]}, End{b, p[1]}
			ties = append(ties, s.measure(rng, i, j, s.truth[a][p[0]].Between(wrong.Mul(s.truth[b][p[1]])), false))
		}
	}
	return ties
}

// shared adds false ties as many robots make them where a place looks like another one: whoever comes by either takes it for
// the other, in the same way.
func (s *simFleet) shared(rng *rand.Rand, ties []simTie, part float64) []simTie {
	want := int(part / (1 - part) * float64(len(ties)))
	end := len(ties) + want
	for tries := 0; len(ties) < end && tries < 1000; tries++ {
		a, b := s.randomPair(rng)
		p, q := s.truth[a][rng.IntN(len(s.truth[a]))], s.truth[b][rng.IntN(len(s.truth[b]))]
		if distance(p.T, q.T) < 10 {
			continue
		}
		turn := lie.SE3{R: lie.ExpSO3([3]float64{0, 0, float64(rng.IntN(4)) * math.Pi / 2})}
		wrong := p.Mul(turn).Mul(q.Inv())
		var atP, atQ []End
		for u := range s.truth {
			for k := range s.truth[u] {
				if distance(s.truth[u][k].T, p.T) < 3 {
					atP = append(atP, End{u, k})
				}
				if distance(s.truth[u][k].T, q.T) < 3 {
					atQ = append(atQ, End{u, k})
				}
			}
		}
		for k := 0; k < 20 && len(ties) < end; k++ {
			i, j := atP[rng.IntN(len(atP))], atQ[rng.IntN(len(atQ))]
			if i.Unit != j.Unit {
				ties = append(ties, s.measure(rng, i, j, s.truth[i.Unit][i.Node].Between(wrong.Mul(s.truth[j.Unit][j.Node])), false))
			}
		}
	}
	return ties
}

func bare(ties []simTie) []Tie {
	out := make([]Tie, len(ties))
	for i := range ties {
		out[i] = ties[i].Tie
	}
	return out
}

// siteOf is the side of a square site with as much room per robot as six have on 48 m.
func siteOf(robots int) float64 { return 48 * math.Sqrt(float64(robots)/6) }

// score is what came of one run.
type score struct {
	falseTies, trueTies, falseHeld, trueHeld, trueRefused, joined int
}

func (c *score) add(d score) {
	c.falseTies += d.falseTies
	c.trueTies += d.trueTies
	c.falseHeld += d.falseHeld
	c.trueHeld += d.trueHeld
	c.trueRefused += d.trueRefused
	c.joined += d.joined
}

func (s *simFleet) decide(ties []simTie) (Result, score) {
	r := Decide(s.units, bare(ties), DefaultOptions(s.dim))
	var c score
	for i, f := range r.Ties {
		switch {
		case ties[i].true && f.Verdict == Held:
			c.trueTies++
			c.trueHeld++
		case ties[i].true:
			c.trueTies++
			if f.Verdict == Refused {
				c.trueRefused++
			}
		default:
			c.falseTies++
			if f.Verdict == Held {
				c.falseHeld++
			}
		}
	}
	size := make([]int, len(s.units))
	for _, k := range r.Island {
		size[k]++
		c.joined = max(c.joined, size[k])
	}
	return r, c
}
