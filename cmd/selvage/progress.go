package main

import (
	"fmt"
	"io"
	"sync"
	"time"

	"github.com/vbauerster/mpb/v8"
	"github.com/vbauerster/mpb/v8/decor"
)

// progress shows what a verb is doing: one moving line on a terminal, which disappears when it is done, and a plain line for each
// phase otherwise.
type progress struct {
	con  *console
	bars *mpb.Progress // nil when err is no terminal
	bar  *mpb.Bar

	mu     sync.Mutex
	phase  string
	detail string
	share  float64 // of the phase, negative when unknown
	since  time.Time
}

func (c *console) progress() *progress {
	p := &progress{con: c, share: -1, since: time.Now()}
	if !c.errTTY {
		return p
	}
	p.bars = mpb.New(mpb.WithOutput(c.err), mpb.WithWidth(30), mpb.WithRefreshRate(100*time.Millisecond))
	p.bar = p.bars.New(0, mpb.NopStyle(), mpb.BarRemoveOnComplete(), mpb.PrependDecorators(decor.Any(func(decor.Statistics) string { return p.line() })))
	return p
}

// begin starts a phase.
func (p *progress) begin(phase string) {
	p.mu.Lock()
	p.phase, p.detail, p.share, p.since = phase, "", -1, time.Now()
	p.mu.Unlock()
	if p.bars == nil {
		fmt.Fprintln(p.con.err, phase)
	}
	p.con.log.Debug().Str("phase", phase).Msg("begin")
}

// at tells how far the phase is: the share that is done, negative when nobody knows, and what else there is to say.
func (p *progress) at(share float64, format string, args ...any) {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.share, p.detail = share, fmt.Sprintf(format, args...)
}

// end takes the line away.
func (p *progress) end() {
	if p.bars == nil {
		return
	}
	p.bar.Abort(true)
	p.bars.Wait()
	p.bars = nil
	p.con = &console{err: io.Discard, log: p.con.log}
}

func (p *progress) line() string {
	p.mu.Lock()
	defer p.mu.Unlock()
	text := fmt.Sprintf("%s  %d s", p.phase, int(time.Since(p.since).Seconds()))
	if p.share >= 0 {
		text = fmt.Sprintf("%s  %3.0f %%", p.phase, 100*min(p.share, 1))
	}
	if p.detail != "" {
		text += "  " + p.detail
	}
	return text
}
