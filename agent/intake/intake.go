package intake

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"sync"

	"selvage/agent"
)

// Taker takes events in order, and returns when those that it took are durable. When it took fewer than all without ctx having ended, it
// refused the next one. The shell of an agent is one.
type Taker interface {
	Take(ctx context.Context, events ...agent.Event) (taken int, err error)
}

const (
	maxLine = 16 << 10 // bytes, more than any line that makes sense
	maxOnce = 256      // lines that are handed over in one go
)

// Intake takes the lines of the front ends of one robot.
type Intake struct {
	options  Options
	taker    Taker
	sessions sessions
}

// New returns an intake that hands over to a taker.
func New(o Options, t Taker) *Intake {
	if o.Dim != 2 && o.Dim != 3 {
		panic("intake: dimension 2 or 3")
	}
	return &Intake{options: o, taker: t, sessions: sessions{newest: o.Newest}}
}

// sessions numbers the sessions of a robot.
type sessions struct {
	mu     sync.Mutex
	newest uint32
}

// begin notes a session with a known number, or gives one to a new one.
func (s *sessions) begin(known bool, number uint32) uint32 {
	s.mu.Lock()
	defer s.mu.Unlock()
	if !known {
		number = s.newest + 1
	}
	s.newest = max(s.newest, number)
	return number
}

// reply is the answer to a line.
type reply struct {
	OK      int     `json:"ok,omitempty"` // number of the line, from 1
	Session *uint32 `json:"session,omitempty"`
	Error   string  `json:"error,omitempty"`
	Line    int     `json:"line,omitempty"`
	Field   string  `json:"field,omitempty"`
}

func refusal(line int, err error) reply {
	r := reply{Error: fmt.Sprintf("line %d: %v", line, err), Line: line}
	var fault *Fault
	if errors.As(err, &fault) {
		r.Field = fault.Field
	}
	return r
}

// Run takes lines until they end or ctx does, and answers each, in order. The error is one of reading or writing, or that of a line
// which is too long, after which nothing more can be understood.
func (i *Intake) Run(ctx context.Context, in io.Reader, out io.Writer) error {
	lines := bufio.NewReaderSize(in, maxLine)
	d := &decoder{Options: i.options, sessions: &i.sessions}
	for number := 0; ; {
		batch, err := d.gather(lines, number)
		number += len(batch)
		if stop := i.hand(ctx, batch); stop != nil {
			return stop
		}
		if err := answer(out, batch); err != nil {
			return err
		}
		if err != nil {
			if err == io.EOF {
				err = nil
			}
			return err
		}
	}
}

// line is a line on its way.
type line struct {
	event agent.Event // nil when there is nothing to hand over
	reply reply
}

// gather waits for a line and takes those that are there with it. Behind the last one the error says why there are no more.
func (d *decoder) gather(in *bufio.Reader, number int) (batch []line, err error) {
	for len(batch) < maxOnce {
		if len(batch) > 0 {
			there, _ := in.Peek(in.Buffered())
			if bytes.IndexByte(there, '\n') < 0 {
				return batch, nil
			}
		}
		text, err := in.ReadSlice('\n')
		number++
		if errors.Is(err, bufio.ErrBufferFull) {
			fault := &Fault{"", fmt.Sprintf("more than %d bytes without an end", maxLine), "a shorter line"}
			err = fmt.Errorf("line %d: %w", number, fault)
			return append(batch, line{reply: refusal(number, fault)}), err
		}
		if len(text) > 0 {
			batch = append(batch, d.line(number, text))
		}
		if err != nil {
			return batch, err
		}
	}
	return batch, nil
}

// line reads one line.
func (d *decoder) line(number int, text []byte) line {
	o, fault := parse(text)
	if fault != nil {
		return line{reply: refusal(number, fault)}
	}
	e, fault := d.event(o)
	switch {
	case fault != nil:
		return line{reply: refusal(number, fault)}
	case e == nil:
		return line{reply: reply{OK: number, Session: d.session}}
	}
	return line{event: e, reply: reply{OK: number}}
}

// hand hands over the events of a batch, around those that are refused.
func (i *Intake) hand(ctx context.Context, batch []line) error {
	var events []agent.Event
	var at []int // in the batch
	for n := range batch {
		if batch[n].event != nil {
			events, at = append(events, batch[n].event), append(at, n)
		}
	}
	for len(events) > 0 {
		taken, err := i.taker.Take(ctx, events...)
		if ctx.Err() != nil {
			return ctx.Err()
		}
		if taken == len(events) {
			return err
		}
		refused := &batch[at[taken]]
		refused.reply = refusal(refused.reply.OK, err)
		events, at = events[taken+1:], at[taken+1:]
	}
	return nil
}

// answer writes the replies of a batch.
func answer(out io.Writer, batch []line) error {
	var text []byte
	for i := range batch {
		b, err := json.Marshal(&batch[i].reply)
		if err != nil {
			return err
		}
		text = append(append(text, b...), '\n')
	}
	if len(text) == 0 {
		return nil
	}
	_, err := out.Write(text)
	return err
}
