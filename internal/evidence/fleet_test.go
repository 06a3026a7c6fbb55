package evidence

import (
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"testing"
	"time"
)

func TestFigures(t *testing.T) {
	seeds := 3
	if v, err := strconv.Atoi(os.Getenv("SEEDS")); err == nil {
		seeds = v
	}
	robots := 6
	if v, err := strconv.Atoi(os.Getenv("ROBOTS")); err == nil {
		robots = v
	}
	dim := 2
	if v, err := strconv.Atoi(os.Getenv("DIM")); err == nil {
		dim = v
	}
	spread := 1.0
	if v, err := strconv.ParseFloat(os.Getenv("SPREAD"), 64); err == nil {
		spread = v
	}
	kinds := []string{"none", "i10", "i30", "i60", "c10", "c30", "c60", "s10", "s30"}
	sum := make([]score, len(kinds))
	var took [9]time.Duration
	runsFalse := make([]int, len(kinds))
	for seed := 1; seed <= seeds; seed++ {
		rng := rand.New(rand.NewPCG(uint64(seed), 7))
		s := simulate(rng, dim, robots, 133, spread*48*math.Sqrt(float64(robots)/6), .05)
		base := s.trueTies(rng)
		for k, kind := range kinds {
			ties := append([]simTie(nil), base...)
			switch kind {
			case "i10":
				ties = s.independent(rng, ties, .1)
			case "i30":
				ties = s.independent(rng, ties, .3)
			case "i60":
				ties = s.independent(rng, ties, .6)
			case "c10":
				ties = s.clustered(rng, ties, .1)
			case "s10":
				ties = s.shared(rng, ties, .1)
			case "s30":
				ties = s.shared(rng, ties, .3)
			case "c60":
				ties = s.clustered(rng, ties, .6)
			case "c30":
				ties = s.clustered(rng, ties, .3)
			}
			start := time.Now()
			_, c := s.decide(ties)
			took[k] += time.Since(start)
			if c.falseHeld > 0 {
				runsFalse[k]++
			}
			x := &sum[k]
			x.falseTies += c.falseTies
			x.trueTies += c.trueTies
			x.falseHeld += c.falseHeld
			x.trueHeld += c.trueHeld
			x.trueRefused += c.trueRefused
			x.joined += c.joined
		}
	}
	for k, kind := range kinds {
		x := sum[k]
		fmt.Printf("%d robots dim %d %-5s ties %.0f true %.0f false; false held %d in %d runs; joined %.2f recall %.4f true refused %d; %.1f ms\n", robots, dim, kind,
			float64(x.trueTies)/float64(seeds), float64(x.falseTies)/float64(seeds), x.falseHeld, runsFalse[k], float64(x.joined)/float64(seeds),
			float64(x.trueHeld)/float64(x.trueTies), x.trueRefused, float64(took[k].Microseconds())/1e3/float64(seeds))
	}
}
