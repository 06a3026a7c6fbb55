package posegraph

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"
	"pgregory.net/rapid"

	"selvage/internal/lie"
)

// gaussNewton adjusts g by the dense twin until the step is nothing.
func gaussNewton(t failer, g *Graph, fixed []int32) {
	for range 60 {
		w := twin(g, fixed)
		if w.size == 0 {
			return
		}
		var chol mat.Cholesky
		if !chol.Factorize(w.h) {
			t.Fatalf("twin is singular")
		}
		var d mat.VecDense
		if err := chol.SolveVecTo(&d, mat.NewVecDense(w.size, w.g)); err != nil {
			t.Fatalf("twin: %v", err)
		}
		for v, o := range w.offset {
			if o < 0 {
				continue
			}
			var step lie.Tangent
			for i, c := range components(g.Dim) {
				step[c] = -d.AtVec(o + i)
			}
			g.Values.Poses[v] = g.Values.Poses[v].Plus(step)
		}
		if mat.Norm(&d, math.Inf(1)) < 1e-8 {
			return
		}
	}
	t.Fatalf("twin does not converge")
}

func TestOptimiseAgainstDense(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		rapid.Check(t, func(t *rapid.T) {
			seed := rapid.Uint64().Draw(t, "seed")
			n := rapid.IntRange(1, 8).Draw(t, "poses")
			make := func() (*Graph, []int32) {
				r := random(seed)
				return sample(r, dim, n, 0.02, seed%2 == 0), fixSome(r, n)
			}
			g, fixed := make()
			before := slices.Clone(g.Values.Poses)
			start := g.Cost()
			res := solver(t, g, fixed).Optimise(DefaultOptions())
			want, _ := make()
			gaussNewton(t, want, fixed)
			samePoses(t, "poses", g.Values.Poses, want.Values.Poses, 1e-6)
			for _, f := range fixed {
				if g.Values.Poses[f] != before[f] {
					t.Fatalf("fixed pose %d moved", f)
				}
			}
			if res.Stop != Converged && res.Stop != NothingToAdjust {
				t.Fatalf("stopped: %v", res.Stop)
			}
			near(t, "costs", []float64{res.InitialCost, res.Cost, res.Cost}, []float64{start, g.Cost(), want.Cost()}, 1e-9, 1)
			if res.Weakest != -1 || res.Refused > res.Iterations || res.Cost > res.InitialCost {
				t.Fatalf("%+v", res)
			}
		})
	})
}

// ring is a drive round a circle with a few shortcuts, error-free, information one: its optimum is its truth and costs nothing.
func ring(r *rand.Rand, dim, n int) *Graph {
	truth := make([]lie.SE3, n)
	for i := range truth {
		a := 2 * math.Pi * float64(i) / float64(n)
		truth[i] = lie.SE2{X: 10 * math.Cos(a), Y: 10 * math.Sin(a), C: -math.Sin(a), S: math.Cos(a)}.Spatial()
	}
	g := New(dim, truth)
	b := g.AddBetween()
	one := [36]float64{0: 1, 7: 1, 14: 1, 21: 1, 28: 1, 35: 1}
	for i := range n {
		b.Add(int32(i), int32((i+1)%n), truth[i].Between(truth[(i+1)%n]), &one)
	}
	for range n / 10 {
		i := r.IntN(n)
		j := (i + 2 + r.IntN(n-3)) % n
		b.Add(int32(i), int32(j), truth[i].Between(truth[j]), &one)
	}
	return g
}

// From a start far off, where plain steps overshoot, the cost never rises, and what is called converged is a stationary point. Most
// starts reach the optimum; the others a minimum of their own, or a residual at half a turn, where the logarithm jumps.
func TestDampingFromFarOff(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		refused, reached := 0, 0
		turn := map[int]float64{3: 1.6, 6: 1.2}[dim]
		for seed := range uint64(20) {
			r := random(seed)
			g := ring(r, dim, 40)
			for i := range g.Values.Poses[1:] {
				g.Values.Poses[i+1] = g.Values.Poses[i+1].Plus(tangent(r, dim, 10, turn))
			}
			last := math.Inf(1)
			options := DefaultOptions()
			options.Watch = func(_ int, cost, damping float64) bool {
				if cost > last || damping < 0 {
					t.Fatalf("seed %d: cost rose from %g to %g", seed, last, cost)
				}
				last = cost
				return true
			}
			res := solver(t, g, []int32{0}).Optimise(options)
			refused += res.Refused
			switch res.Stop {
			case Converged:
				w := twin(g, []int32{0})
				near(t, "gradient", w.g, make([]float64, w.size), 1e-5, 1)
				if res.Cost < 1e-10 {
					reached++
				}
			case NoDecrease:
			default:
				t.Errorf("seed %d: stopped: %v", seed, res.Stop)
			}
		}
		t.Logf("%d steps refused, %d of 20 at the optimum", refused, reached)
		if refused == 0 {
			t.Errorf("no step was refused: the start is too close to test damping")
		}
		if reached < 12 {
			t.Errorf("%d of 20 reached the optimum", reached)
		}
	})
}

// Damping multiplies the diagonal and leaves no trace.
func TestDampingIsTakenBack(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		g := loop(dim)
		s := solver(t, g, []int32{1})
		s.Linearise()
		for k := range 2 * dim {
			plain := column(s, k)
			want := slices.Clone(plain)
			want[k] *= 1 + 0.5
			s.damp(0.5)
			near(t, "damped", column(s, k), want, 1e-15, 0)
			s.undamp(0.5)
			if !slices.Equal(column(s, k), plain) {
				t.Errorf("column %d: damping left a trace", k)
			}
			s.damp(0)
			if !slices.Equal(column(s, k), plain) {
				t.Errorf("column %d: no damping changed the matrix", k)
			}
		}
	})
}

// loop is a small graph with one solution: three poses, three measurements.
func loop(dim int) *Graph {
	r := random(5)
	g := New(dim, []lie.SE3{turned(r, dim, 5, 1), turned(r, dim, 5, 1), turned(r, dim, 5, 1)})
	b := g.AddBetween()
	for k := range int32(3) {
		i, j := k, (k+1)%3
		info := information(r)
		b.Add(i, j, g.Values.Poses[i].Between(g.Values.Poses[j]).Plus(tangent(r, dim, 0.1, 0.1)), &info)
	}
	return g
}

func TestReasonsToStop(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		stop := func(g *Graph, fixed []int32, change func(*Options), want Stop) Result {
			t.Helper()
			o := DefaultOptions()
			if change != nil {
				change(&o)
			}
			res := solver(t, g, fixed).Optimise(o)
			if res.Stop != want {
				t.Errorf("stopped: %v, want %v (%+v)", res.Stop, want, res)
			}
			if c := g.Cost(); math.Abs(c-res.Cost) > 1e-12*(1+math.Abs(c)) {
				t.Errorf("%v: cost %g, at the values %g", want, res.Cost, c)
			}
			return res
		}
		stop(loop(dim), []int32{0}, nil, Converged)
		stop(loop(dim), []int32{0, 1, 2}, nil, NothingToAdjust)
		stop(New(dim, nil), nil, nil, NothingToAdjust)
		if res := stop(loop(dim), []int32{0}, func(o *Options) { o.MaxIterations = 1 }, IterationLimit); res.Iterations != 1 {
			t.Errorf("limit 1: %d iterations", res.Iterations)
		}
		if res := stop(loop(dim), []int32{0}, func(o *Options) { o.MaxIterations = 0 }, IterationLimit); res.Cost != res.InitialCost {
			t.Errorf("limit 0: the cost changed")
		}
		asked := 0
		res := stop(loop(dim), []int32{0}, func(o *Options) {
			o.Watch = func(iteration int, _, _ float64) bool { asked++; return iteration < 2 }
		}, Interrupted)
		if asked != 3 || res.Iterations != 2 {
			t.Errorf("interrupted before the third step: asked %d times, %d iterations", asked, res.Iterations)
		}
		stop(loop(dim), []int32{0}, func(o *Options) { o.Tolerance = 0 }, NoDecrease)
	})
}

// What the measurements leave free is found and named: a pose without a measurement, two that hang together but on nothing else,
// a pose whose heading nobody measured.
func TestUndetermined(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		lone := loop(dim)
		lone.Values.Poses = append(lone.Values.Poses, lie.Identity())

		pair := loop(dim)
		pair.Values.Poses = append(pair.Values.Poses, lie.Identity(), turned(random(1), dim, 3, 1))
		info := information(random(2))
		pair.Sets[0].(*Between).Add(3, 4, turned(random(3), dim, 3, 1.1), &info)

		heading := loop(dim)
		heading.Values.Poses = append(heading.Values.Poses, turned(random(1), dim, 3, 1))
		info = [36]float64{0: 100, 7: 100, 14: 100, 21: 1, 28: 1}
		heading.Sets[0].(*Between).Add(2, 3, turned(random(3), dim, 3, 1), &info)

		weightless := loop(dim)
		weightless.Sets[0].(*Between).W[1], weightless.Sets[0].(*Between).W[2] = 0, 0

		exact := New(dim, []lie.SE3{lie.Identity(), lie.Identity(), lie.Identity()}) // the gradient is zero from the start
		exact.AddBetween().Add(1, 2, lie.Identity(), &info)

		for _, c := range []struct {
			name string
			g    *Graph
			free []int32
		}{
			{"exact", exact, []int32{1, 2}},
			{"a pose alone", lone, []int32{3}}, {"a pair alone", pair, []int32{3, 4}}, {"no heading", heading, []int32{3}},
			{"weight zero", weightless, []int32{2}},
		} {
			before := slices.Clone(c.g.Values.Poses)
			res := solver(t, c.g, []int32{0}).Optimise(DefaultOptions())
			if res.Stop != Undetermined || !slices.Contains(c.free, res.Weakest) {
				t.Errorf("%s: %v, weakest %d, want undetermined and one of %d", c.name, res.Stop, res.Weakest, c.free)
			}
			if res.Iterations > 100 {
				t.Errorf("%s: %d iterations", c.name, res.Iterations)
			}
			if c.g.Values.Poses[0] != before[0] {
				t.Errorf("%s: the fixed pose moved", c.name)
			}
		}
	})
}

// An information matrix that is not positive must not hang the solver or make it claim convergence.
func TestIndefiniteInformation(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		g := loop(dim)
		b := g.Sets[0].(*Between)
		for k := range 3 {
			m := b.Info(k)
			for i := range dim {
				m[i*dim+i] *= -1
			}
		}
		res := solver(t, g, []int32{0}).Optimise(DefaultOptions())
		if res.Stop != Undetermined || res.Iterations > 50 {
			t.Errorf("%+v", res)
		}
		g = loop(dim)
		copy(g.Sets[0].(*Between).Info(0), make([]float64, dim))
		g.Sets[0].(*Between).Info(0)[1] = math.NaN()
		if res := solver(t, g, []int32{0}).Optimise(DefaultOptions()); res.Stop == Converged || res.Iterations > 50 {
			t.Errorf("NaN: %+v", res)
		}
	})
}

// Decrease is 1/2 v' H^-1 v; Step takes what Decrease of the gradient promises, and only below the limit.
func TestStepAndDecrease(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		g := sample(random(8), dim, 6, 0.01, true)
		fixed := []int32{2}
		s := solver(t, g, fixed)
		cost, gradient := s.Linearise()
		v := slices.Clone(gradient)
		w := twin(g, fixed)
		var chol mat.Cholesky
		if !chol.Factorize(w.h) {
			t.Fatal("twin is singular")
		}
		var x mat.VecDense
		if err := chol.SolveVecTo(&x, mat.NewVecDense(w.size, v)); err != nil {
			t.Fatal(err)
		}
		want := mat.Dot(&x, mat.NewVecDense(w.size, v)) / 2
		got, err := s.Decrease(v)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "decrease", []float64{got}, []float64{want}, 1e-6, 0)
		before := slices.Clone(g.Values.Poses)
		if d, taken := s.Step(got * 0.999); taken || d != got || !slices.Equal(before, g.Values.Poses) {
			t.Errorf("a step above the limit: %v, decrease %g of %g", taken, d, got)
		}
		if d, taken := s.Step(got * 1.001); !taken || d != got {
			t.Errorf("a step below the limit: %v, decrease %g of %g", taken, d, got)
		}
		after := g.Cost()
		near(t, "fall of the cost", []float64{cost - after}, []float64{got}, 0.05, 0)
		if before[2] != g.Values.Poses[2] {
			t.Error("the fixed pose moved")
		}
		lone := New(dim, make([]lie.SE3, 2))
		lone.Values.Poses[0], lone.Values.Poses[1] = lie.Identity(), lie.Identity()
		s = solver(t, lone, []int32{0})
		if _, taken := s.Step(math.Inf(1)); taken {
			t.Error("a step without measurements")
		}
		s.Linearise()
		if _, err := s.Decrease(make([]float64, dim)); err == nil {
			t.Error("decrease without measurements")
		}
	})
}

// The same bits from run to run.
func TestReproducible(t *testing.T) {
	run := func() []lie.SE3 {
		g := sample(random(4), 6, 30, 0.1, true)
		solver(t, g, []int32{3}).Optimise(DefaultOptions())
		return g.Values.Poses
	}
	if !slices.Equal(run(), run()) {
		t.Error("two runs differ")
	}
}

func TestNoAllocation(t *testing.T) {
	both(t, func(t *testing.T, dim int) {
		g := sample(random(4), dim, 30, 0.01, true)
		s := solver(t, g, []int32{3})
		start := slices.Clone(g.Values.Poses)
		if a := testing.AllocsPerRun(20, func() {
			copy(g.Values.Poses, start)
			s.Linearise()
			s.Step(math.Inf(1))
		}); a != 0 {
			t.Errorf("linearise and step: %v allocations", a)
		}
		options := DefaultOptions()
		if a := testing.AllocsPerRun(20, func() {
			copy(g.Values.Poses, start)
			if res := s.Optimise(options); res.Iterations < 2 {
				t.Fatalf("%+v", res)
			}
		}); a > 0 {
			t.Errorf("optimise: %v allocations", a)
		}
	})
}

func TestStopNames(t *testing.T) {
	seen := map[string]bool{}
	for s := Stop(0); s <= NothingToAdjust; s++ {
		if seen[s.String()] {
			t.Errorf("%d: %s again", s, s)
		}
		seen[s.String()] = true
	}
}
