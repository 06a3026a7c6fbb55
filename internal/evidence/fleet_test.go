package evidence

import (
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"testing"

	"selvage/internal/lie"
)

// sorts are the ways to spoil the ties of a fleet.
var sorts = []struct {
	name  string
	spoil func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie
}{
	{"none", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return ties }},
	{"independent 10 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.independent(rng, ties, .1) }},
	{"independent 30 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.independent(rng, ties, .3) }},
	{"independent 60 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.independent(rng, ties, .6) }},
	{"clustered 10 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.clustered(rng, ties, .1) }},
	{"clustered 30 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.clustered(rng, ties, .3) }},
	{"clustered 60 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.clustered(rng, ties, .6) }},
	{"shared 10 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.shared(rng, ties, .1) }},
	{"shared 30 %", func(s *simFleet, rng *rand.Rand, ties []simTie) []simTie { return s.shared(rng, ties, .3) }},
}

// fleets are what the figures are about. least is the number of robots to be joined on average, and recall the part of the true
// ties to be held, as long as not more than 30 % are false.
var fleets = []struct {
	name        string
	dim, robots int
	wide        float64 // side of the site, as a factor
	seeds       int     // as a rule
	least       float64
	recall      float64
}{
	{"six in the plane", 2, 6, 1, 3, 5.5, .85},
	{"six in space", 3, 6, 1, 1, 5.5, .85},
	{"six that seldom meet", 2, 6, 1.6, 3, 0, 0}, // many pairs have fewer than five places: only safety counts
	{"six that hardly meet", 2, 6, 2.2, 3, 0, 0},
	{"two", 2, 2, 1, 5, 0, 0},
	{"ten", 2, 10, 1, 0, 9, .85},
	{"twenty", 2, 20, 1, 0, 18, .85},
	{"thirty", 2, 30, 1, 0, 27, .85},
}

// No false tie may be held, whatever the kind; the rest are averages. SELVAGE_SEEDS sets how many seeds each fleet is run with:
// 20 takes about twenty minutes. With -v the figures are printed.
func TestFigures(t *testing.T) {
	for _, f := range fleets {
		seeds := f.seeds
		if v, err := strconv.Atoi(os.Getenv("SELVAGE_SEEDS")); err == nil {
			seeds = v
		}
		if seeds == 0 {
			continue
		}
		t.Run(f.name, func(t *testing.T) {
			total := make([]score, len(sorts))
			for seed := 1; seed <= seeds; seed++ {
				rng := rand.New(rand.NewPCG(uint64(seed), 7))
				s := simulate(rng, f.dim, f.robots, 133, f.wide*siteOf(f.robots), .05)
				base := s.trueTies(rng)
				for k, sort := range sorts {
					_, c := s.decide(sort.spoil(&s, rng, slices.Clone(base)))
					if c.falseHeld > 0 {
						t.Errorf("%s, seed %d: %d of %d false ties held", sort.name, seed, c.falseHeld, c.falseTies)
					}
					total[k].add(c)
				}
			}
			for k, sort := range sorts {
				c, n := total[k], float64(seeds)
				joined, recall := float64(c.joined)/n, float64(c.trueHeld)/float64(c.trueTies)
				t.Logf("%-17s %4.0f true, %4.0f false ties; %d false held; %.2f joined, recall %.3f, %.4f refused in error", sort.name,
					float64(c.trueTies)/n, float64(c.falseTies)/n, c.falseHeld, joined, recall, float64(c.trueRefused)/float64(c.trueTies))
				if k > 2 && sort.name != "clustered 10 %" {
					continue
				}
				if joined < f.least || recall < f.recall {
					t.Errorf("%s: %.2f robots joined, recall %.3f; want at least %.2f and %.2f", sort.name, joined, recall, f.least, f.recall)
				}
			}
		})
	}
}

// Where a robot put its frame, and in which order ties came, must not matter.
func TestFindingsDoNotDependOnFramesOrOrder(t *testing.T) {
	rng := rand.New(rand.NewPCG(2, 7))
	s := simulate(rng, 2, 6, 133, siteOf(6), .05)
	ties := s.independent(rng, s.trueTies(rng), .3)
	want, _ := s.decide(ties)
	for i, f := range want.Ties { // a statistic always stands beside the bound it was held against
		if (f.DoF > 0) != (f.Limit > 0) || f.Verdict == Refused && !(f.Statistic >= f.Limit) || f.Verdict == Held && !(f.Statistic < f.Limit) {
			t.Errorf("tie %d: %+v", i, f)
		}
	}

	moved := s
	moved.units = slices.Clone(s.units)
	for u := range moved.units {
		d := lie.Exp(lie.Tangent{100 * rng.NormFloat64(), 100 * rng.NormFloat64(), 0, 0, 0, 3 * rng.Float64()})
		x := slices.Clone(s.units[u].Poses)
		for k := range x {
			x[k] = d.Mul(x[k])
		}
		moved.units[u].Poses = x
	}
	got, _ := moved.decide(ties)
	for i := range ties {
		if got.Ties[i].Verdict != want.Ties[i].Verdict {
			t.Errorf("tie %d is %v in other frames, %v before", i, got.Ties[i].Verdict, want.Ties[i].Verdict)
		}
	}

	order := rng.Perm(len(ties))
	mixed := make([]simTie, len(ties))
	for i, k := range order {
		mixed[i] = ties[k]
	}
	got, _ = s.decide(mixed)
	differ := 0
	for i, k := range order {
		if got.Ties[i].Verdict != want.Ties[k].Verdict {
			differ++ // of two sets equally large, either may be taken
		}
	}
	if differ*100 > len(ties) || !slices.Equal(got.Island, want.Island) {
		t.Errorf("%d of %d verdicts differ in another order; islands %v and %v", differ, len(ties), got.Island, want.Island)
	}

	again, _ := s.decide(ties)
	for i := range ties {
		if again.Ties[i] != want.Ties[i] {
			t.Fatalf("tie %d: %+v, then %+v", i, want.Ties[i], again.Ties[i])
		}
	}
}
