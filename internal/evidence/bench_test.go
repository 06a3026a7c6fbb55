package evidence

import (
	"fmt"
	"math/rand/v2"
	"testing"
)

// One call of Decide with 30 % independent false ties, the units' covariances included.
func BenchmarkDecide(b *testing.B) {
	for _, robots := range []int{6, 30} {
		rng := rand.New(rand.NewPCG(1, 7))
		s := simulate(rng, 2, robots, 133, siteOf(robots), .05)
		ties := s.independent(rng, s.trueTies(rng), .3)
		if want := 100 * robots; len(ties) > want {
			rng.Shuffle(len(ties), func(i, j int) { ties[i], ties[j] = ties[j], ties[i] })
			ties = ties[:want]
		}
		plain := bare(ties)
		b.Run(fmt.Sprintf("robots=%d/ties=%d", robots, len(ties)), func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				Decide(s.units, plain, DefaultOptions(2))
			}
		})
	}
}
