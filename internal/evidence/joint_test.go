package evidence

import (
	"math/rand/v2"
	"testing"

	"selvage/internal/lie"
)

// toy is a fleet whose hypotheses shift frames by multiples of 10 m; frames of the truth are all alike. False ones come from so
// few shifts that many agree with each other.
func toy(rng *rand.Rand, n int, density, wrong float64, most int) *fleet {
	b := &body{o: DefaultOptions(2), tracks: make([]*track, n), give: make([]float64, n), reach: make([]float64, n)}
	var hs []hypothesis
	for x := 0; x < n; x++ {
		for y := x + 1; y < n; y++ {
			seen := map[[2]float64]bool{}
			for k := 0; k < 2; k++ {
				if rng.Float64() > density {
					continue
				}
				at := lie.Identity()
				weight := 1 + rng.IntN(most)
				if rng.Float64() < wrong {
					at.T[0], at.T[1] = float64(rng.IntN(3)-1)*10, float64(rng.IntN(2))*10
				}
				if seen[[2]float64{at.T[0], at.T[1]}] {
					continue
				}
				seen[[2]float64{at.T[0], at.T[1]}] = true
				h := hypothesis{a: x, b: y, ab: at, weight: weight, count: weight, chance: 1e-9}
				h.pa = at.T
				b.grant(&h)
				hs = append(hs, h)
			}
		}
	}
	return newFleet(b, hs)
}

// exhaust goes through all forests of hypotheses and returns the best score, and the best score without each hypothesis.
func (f *fleet) exhaust() (best int, without []int) {
	without = make([]int, len(f.hs))
	n := len(f.hs)
	c := config{at: make([]lie.SE3, f.n), comp: make([]int, f.n), holds: make([]bool, n), pa: make([][3]float64, n), qb: make([][3]float64, n)}
	for u := range c.at {
		c.at[u], c.comp[u] = lie.Identity(), u
	}
	var visit func(k int, c config)
	visit = func(k int, c config) {
		if k == n {
			d := c.clone()
			f.judge(&d)
			best = max(best, d.score)
			for m := range d.holds {
				if !d.holds[m] {
					without[m] = max(without[m], d.score)
				}
			}
			return
		}
		visit(k+1, c)
		h := &f.hs[k]
		if c.comp[h.a] != c.comp[h.b] {
			d := c.clone()
			f.shift(&d, c.comp[h.b], c.comp[h.a], f.displacement(&c, k))
			visit(k+1, d)
		}
	}
	visit(0, c)
	return best, without
}

// The search must find the best configuration and the true margins of small fleets, where all configurations can be tried.
func TestMarginsAgainstExhaustion(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	contested, unsafe, wrongBest, total, cautious := 0, 0, 0, 0, 0
	for run := 0; run < 400; run++ {
		n := 3 + rng.IntN(2)
		density, wrong := 0.9, 0.5
		if run%4 == 0 {
			n, density, wrong = 5, 0.4, 0.4
		}
		f := toy(rng, n, density, wrong, 4)
		best, without := f.exhaust()
		c := f.best()
		limit := 5
		margins := f.margins(&c, limit)
		if c.score != best {
			wrongBest++
		}
		for k := range f.hs {
			if !c.holds[k] {
				continue
			}
			got := margins[k]
			want := min(limit, c.score-without[k])
			total++
			if want < limit {
				contested++
			}
			if got > want {
				unsafe++
				if testing.Verbose() && unsafe < 5 {
					t.Logf("run %d hypothesis %d: margin %d, truly %d", run, k, got, want)
				}
			}
			if got < want {
				cautious++
			}
		}
	}
	t.Logf("best configuration missed %d of 400; %d margins, %d below the limit, %d too large, %d too small", wrongBest, total, contested, unsafe, cautious)
	if unsafe > 0 {
		t.Errorf("%d margins are too large", unsafe)
	}
	if cautious*100 > total || wrongBest*100 > 400 || contested*2 < total {
		t.Error("the search or the trial has become poor")
	}
}
