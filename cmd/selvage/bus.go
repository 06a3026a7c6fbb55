package main

import (
	"context"
	"os"
	"os/signal"
	"syscall"
)

type busCmd struct {
	Config string `arg:"" help:"Configuration of the base, base.yaml."`
}

func (busCmd) Help() string {
	return `Runs the bus of a fleet alone, for a base where the coordinator is another process or another computer. It needs the section serve of base.yaml, and the secret of the base is not read. It runs until SIGTERM or an interrupt; at SIGHUP it reads again who is enrolled, and ends the connections of robots that are revoked.

Example, a fleet without keys on one desk, for a second:

  echo '{fleet: desk, dimension: 2, unsigned: true, robots: [r1, r2], serve: {listen: "127.0.0.1:14222", store: desk-bus}, holder: desk, log: text}' > desk-bus.yaml
  timeout --preserve-status 1 selvage bus desk-bus.yaml
`
}

// Run implements the verb.
func (c *busCmd) Run(ctx context.Context, con *console) error {
	again := make(chan os.Signal, 1)
	signal.Notify(again, syscall.SIGHUP)
	b, err := readBase(c.Config)
	if err != nil {
		return err
	}
	if b.Serve.Listen == "" {
		return badInput("%s: found no serve, expected one: this is where the bus is to run", c.Config)
	}
	con.runs(ctx, b.Log, b.Fleet)
	server, err := b.serve(con)
	if err != nil {
		return err
	}
	for {
		select {
		case <-again:
			b.readmit(con, server)
		case <-ctx.Done():
			con.log.Info().Msg("stopping")
			if err := server.Close(); err != nil {
				return unavailable("%w", err)
			}
			return nil
		}
	}
}
