package main

import (
	"fmt"
	"io"

	"selvage/scenarios"
)

// watch shows how far a rehearsal is: the moving line on a terminal, otherwise a plain line now and then.
type watch struct {
	*progress
	told  int64 // tenths of the outing, on the bus tens of seconds
	onBus bool  // the clock on the wall runs, and nobody knows how long
}

// watch starts to show progress; a silent one shows nothing.
func (c *console) watch(silent, onBus bool) *watch {
	if silent {
		c = &console{err: io.Discard, log: c.log}
	}
	return &watch{progress: c.progress(), onBus: onBus}
}

// at takes the state of the run.
func (w *watch) at(p scenarios.Progress) {
	state := fmt.Sprintf("%d joined, %d ties held", p.Joined, p.Held)
	if w.onBus {
		w.progress.at(-1, "%s", state)
		w.tell(p.NowNS/10e9, fmt.Sprintf("%d s", p.NowNS/1e9), state)
		return
	}
	share := 1.0
	if p.EndNS > 0 {
		share = float64(p.NowNS) / float64(p.EndNS)
	}
	minutes := p.NowNS / 60e9
	state = fmt.Sprintf("%d h %02d min, %s", minutes/60, minutes%60, state)
	if share > 1 {
		state += ", coming to rest"
	}
	w.progress.at(share, "%s", state)
	tenth := min(int64(10*share), 10)
	w.tell(tenth, fmt.Sprintf("%3d %%", 10*tenth), state)
}

// tell prints a plain line where there is no moving one, once for each step.
func (w *watch) tell(step int64, how, state string) {
	if w.bars == nil && step > w.told {
		w.told = step
		fmt.Fprintf(w.con.err, "%s  %s\n", how, state)
	}
}
