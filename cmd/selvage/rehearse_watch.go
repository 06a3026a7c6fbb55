package main

import (
	"fmt"
	"io"

	"selvage/scenarios"
)

// watch shows how far a rehearsal is: the moving line on a terminal, otherwise a plain line for each tenth of the outing.
type watch struct {
	*progress
	told int // tenths
}

// watch starts to show progress; a silent one shows nothing.
func (c *console) watch(silent bool) *watch {
	if silent {
		c = &console{err: io.Discard, log: c.log}
	}
	return &watch{progress: c.progress()}
}

// at takes the state of the run.
func (w *watch) at(p scenarios.Progress) {
	share := 1.0
	if p.EndNS > 0 {
		share = float64(p.NowNS) / float64(p.EndNS)
	}
	minutes := p.NowNS / 60e9
	text := fmt.Sprintf("%d h %02d min, %d joined, %d ties held", minutes/60, minutes%60, p.Joined, p.Held)
	if share > 1 {
		text += ", coming to rest"
	}
	w.progress.at(share, "%s", text)
	if tenth := int(10 * share); w.bars == nil && p.EndNS > 0 && tenth > w.told && tenth <= 10 {
		w.told = tenth
		fmt.Fprintf(w.con.err, "%3d %%  %s\n", 10*tenth, text)
	}
}
