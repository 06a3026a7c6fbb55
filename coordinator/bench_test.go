package coordinator

import (
	"fmt"
	"testing"

	"selvage/msgs"
)

// BenchmarkTick is what a base of 30 robots with 3000 ties does in the seconds between solutions, while a tie comes every second.
func BenchmarkTick(b *testing.B) {
	for _, robots := range []int{3, 30} {
		b.Run(fmt.Sprintf("%d robots, %d ties", robots, 100*robots), func(b *testing.B) {
			base := newBase(b, 3, nil)
			var tracks []*track
			for i := range robots {
				tracks = append(tracks, newTrack(fmt.Sprintf("r%d", i), 1, 100, 3, uint64(i)))
				base.summarise(tracks[i])
			}
			see := func(i int) {
				x, y := tracks[i%robots], tracks[(i+1+i/robots%(robots-1))%robots]
				base.hear(x.robot, msgs.KindTie, base.tie(x, i%100, y, (7*i)%100, 0))
			}
			for i := range 100 * robots {
				see(i)
			}
			base.tick(1)
			base.solved = 1 << 62 // no solution from here on
			for i := 0; b.Loop(); i++ {
				see(i)
				base.tick(1)
			}
		})
	}
}
