package main

import (
	"context"
	"fmt"
	"os"
	"os/signal"
	"syscall"
	"time"

	"github.com/mattn/go-isatty"
	"github.com/rs/zerolog"

	"selvage/internal/bus"
	"selvage/msgs"
)

// lastWord is how long a program that was told to stop may still take. Whatever it leaves behind then is what a power cut would leave,
// and nothing that was acknowledged is lost by that.
const lastWord = 4 * time.Second

// runs makes the log what the configuration says, and sees to it that the program ends when it is told to.
func (c *console) runs(ctx context.Context, format, fleet string) {
	if format == "text" {
		plain := !isatty.IsTerminal(os.Stderr.Fd()) || os.Getenv("NO_COLOR") != ""
		c.log = c.log.Output(zerolog.ConsoleWriter{Out: os.Stderr, NoColor: plain, TimeFormat: time.DateTime})
	} else {
		c.log = c.log.Output(os.Stderr)
	}
	c.log = c.log.With().Str("fleet", fleet).Logger()
	signal.Notify(make(chan os.Signal, 1), syscall.SIGTERM) // a second one, to the group of the process say, changes nothing
	context.AfterFunc(ctx, func() {
		time.AfterFunc(lastWord, func() {
			c.log.Warn().Msg("stopped in the middle of its work; nothing that was acknowledged is lost")
			os.Exit(exitDone)
		})
	})
}

// complain logs what went wrong and can be borne.
func (c *console) complain(err error) { c.log.Warn().Err(err).Msg("refused or not sent") }

// client says how to connect to the bus; changed is called whenever the link has come or gone.
func (c *console) client(name string, changed func(is bool)) bus.ClientOptions {
	return bus.ClientOptions{
		Name: name,
		Warn: func(err error) { c.log.Warn().Err(err).Msg("bus") },
		Connected: func(is bool) {
			if is {
				c.log.Info().Msg("the link is up")
			} else {
				c.log.Warn().Msg("the link is down")
			}
			changed(is)
		},
	}
}

// epochText writes an epoch as logs and tables have it.
func epochText(e msgs.Epoch) string { return fmt.Sprintf("%d.%d", e.Incarnation, e.Number) }
