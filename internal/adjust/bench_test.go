package adjust

import (
	"path/filepath"
	"testing"

	"selvage/internal/posegraph"
	"selvage/internal/survey"
)

// BenchmarkPublishedSets times the phases of an adjustment by one worker: build (survey to graph), start (chordal), analyse, optimise, and
// the last three together.
func BenchmarkPublishedSets(b *testing.B) {
	for _, c := range best {
		s, err := survey.ReadPoseTables(filepath.Join(shared(b), "datasets", c.set))
		if err != nil {
			b.Fatal(err)
		}
		must := func(err error) {
			if err != nil {
				b.Fatal(err)
			}
		}
		build := func() *Problem {
			p, err := New(s, nil)
			must(err)
			return p
		}
		phase := func(name string, before, timed func(p *Problem)) {
			b.Run(c.set+"/"+name, func(b *testing.B) {
				b.ReportAllocs()
				for b.Loop() {
					b.StopTimer()
					p := build()
					before(p)
					b.StartTimer()
					timed(p)
				}
			})
		}
		start := func(p *Problem) { must(p.Begin(Chordal)) }
		analyse := func(p *Problem) { must(p.Analyse(1)) }
		solve := func(p *Problem) { p.Solve(posegraph.DefaultOptions()) }
		b.Run(c.set+"/build", func(b *testing.B) {
			b.ReportAllocs()
			for b.Loop() {
				build()
			}
		})
		phase("start", func(*Problem) {}, start)
		phase("analyse", start, analyse)
		phase("optimise", func(p *Problem) { start(p); analyse(p) }, solve)
		phase("all", func(*Problem) {}, func(p *Problem) { start(p); analyse(p); solve(p) })
	}
}
