package evidence

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"selvage/internal/lie"
)

// wander is a random track of n keyframes with its odometry, in the plane or in space.
type wander struct {
	dim   int
	steps []lie.SE3 // true; step k leads into keyframe k
	info  [36]float64
}

func newWander(rng *rand.Rand, dim, n int) *wander {
	w := &wander{dim: dim, steps: []lie.SE3{lie.Identity()}}
	for i := range 6 {
		s := 0.02
		if i > 2 {
			s = 0.0017
		}
		w.info[7*i] = 1 / (s * s)
	}
	for range n - 1 {
		xi := lie.Tangent{0.5 + 0.5*rng.Float64(), 0.1 * rng.NormFloat64(), 0, 0, 0, 0.3 * rng.NormFloat64()}
		if dim == 3 {
			xi[2], xi[3], xi[4] = 0.1*rng.NormFloat64(), 0.05*rng.NormFloat64(), 0.05*rng.NormFloat64()
		}
		w.steps = append(w.steps, lie.Exp(xi))
	}
	return w
}

// chain makes the chain of the steps as given.
func (w *wander) chain(steps []lie.SE3) *Chain {
	c := NewChain(w.dim)
	for k, z := range steps {
		c.Keyframe(z)
		if k > 0 {
			c.Odometry(k-1, k, z, &w.info)
		}
	}
	c.prepare(0)
	return c
}

// TestLegIsItsSteps compares a leg with the steps it is made of, taken one after the other.
func TestLegIsItsSteps(t *testing.T) {
	for _, dim := range []int{2, 3} {
		rng := rand.New(rand.NewPCG(1, uint64(dim)))
		w := newWander(rng, dim, 40)
		c := w.chain(w.steps)
		for range 50 {
			i, j := rng.IntN(40), rng.IntN(40)
			leg, twin := start(), path{x: lie.Identity()}
			leg.along(c, i, j)
			for k := i; k < j; k++ {
				twin.extend(&w.steps[k+1], &c.noise[k+1])
			}
			for k := i; k > j; k-- {
				z := w.steps[k].Inv()
				noise := c.noise[k].carry(&z)
				twin.extend(&z, &noise)
			}
			if d := leg.x.Between(twin.x); norm(d.Log()) > 1e-12 {
				t.Fatalf("dimension %d, leg %d to %d: pose off by %g", dim, i, j, norm(d.Log()))
			}
			var a, b [36]float64
			n := leg.c.dense(dim, &a)
			twin.c.dense(dim, &b)
			for k := range n * n {
				if math.Abs(a[k]-b[k]) > 1e-12 {
					t.Fatalf("dimension %d, leg %d to %d: covariance %v, step by step %v", dim, i, j, a[:n*n], b[:n*n])
				}
			}
		}
	}
}

// TestTurnIsTheDerivative compares the effect of a heading bias on a walk, across a closure too, with what it does.
func TestTurnIsTheDerivative(t *testing.T) {
	for _, dim := range []int{2, 3} {
		rng := rand.New(rand.NewPCG(2, uint64(dim)))
		w := newWander(rng, dim, 40)
		closure := link{i: 3, j: 30, z: lie.Exp(lie.Tangent{1, 2, 0, 0, 0, 0.7})}
		walk := func(bias float64) way {
			steps := slices.Clone(w.steps)
			for k := 1; k < len(steps); k++ {
				half := lie.Exp(lie.Tangent{5: bias * distance(w.steps[k].T, [3]float64{}) / 2})
				steps[k] = half.Mul(steps[k]).Mul(half)
			}
			c, x := w.chain(steps), start()
			x.along(c, 10, 3)
			x.across(&closure, false)
			x.along(c, 30, 39)
			x.along(c, 39, 30)
			x.across(&closure, true)
			x.along(c, 3, 17)
			return x
		}
		plain := walk(0)
		const h = 1e-6
		more, less := walk(h), walk(-h)
		d := less.x.Between(more.x)
		for k, v := range d.Log() {
			if got := plain.turn[k]; math.Abs(v/(2*h)-got) > 1e-5*(1+math.Abs(got)) {
				t.Errorf("dimension %d: component %d of the turn is %g, the difference says %g", dim, k, got, v/(2*h))
			}
		}
	}
}

func norm(x lie.Tangent) float64 {
	sum := 0.0
	for _, v := range x {
		sum += v * v
	}
	return math.Sqrt(sum)
}

// TestWalkIsTheShortest compares ways with those of Floyd and Warshall over all keyframes.
func TestWalkIsTheShortest(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 0))
	for range 60 {
		const n = 25
		w := newWander(rng, 2, n)
		c := w.chain(w.steps)
		if rng.IntN(3) == 0 { // a track in two parts
			at := 1 + rng.IntN(n-1)
			c.part[at], c.ready = true, at
			c.prepare(0)
		}
		var links []link
		for range 1 + rng.IntN(8) {
			i := rng.IntN(n - 1)
			links = append(links, link{i: i, j: i + 1 + rng.IntN(n-1-i), z: lie.Identity()})
		}
		net := newNetwork(c, links)
		var d [n][n]float64
		for i := range n {
			for j := range n {
				d[i][j] = math.Inf(1)
				if c.joined(i, j) {
					d[i][j] = math.Abs(c.travel[i] - c.travel[j])
				}
			}
		}
		for k := 1; k < len(links); k++ { // all but the first are open
			net.open(k)
			i, j := links[k].i, links[k].j
			d[i][j] = math.Min(d[i][j], tieCost)
			d[j][i] = d[i][j]
		}
		for k := range n {
			for i := range n {
				for j := range n {
					d[i][j] = math.Min(d[i][j], d[i][k]+d[k][j])
				}
			}
		}
		x, ok := net.walk(0)
		want := d[links[0].i][links[0].j]
		if ok != !math.IsInf(want, 1) {
			t.Fatalf("a way was found: %v, the shortest has %g m", ok, want)
		}
		if !ok {
			continue
		}
		got := x.length
		for v := net.ends[0][1]; v >= 0; v = net.prev[v] {
			if net.via[v] >= 0 {
				got += tieCost
			}
		}
		if math.Abs(got-want) > 1e-9 {
			t.Fatalf("way of %g m, the shortest has %g m", got, want)
		}
	}
}
