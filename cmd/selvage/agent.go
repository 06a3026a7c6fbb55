package main

import (
	"context"
	"crypto/rand"
	"errors"
	"net"
	"os"
	"sync"

	"selvage/agent"
	"selvage/agent/intake"
	"selvage/agent/record"
	"selvage/agent/shell"
	"selvage/internal/bus"
	"selvage/internal/config"
	"selvage/internal/journal"
	"selvage/internal/keys"
)

type agentCmd struct {
	Config string `arg:"" help:"Configuration of the robot, agent.yaml."`
}

func (agentCmd) Help() string {
	return `Runs the agent of one robot. What the front end tells it, lines of JSON on a socket or on standard input (agent/INTAKE.md), it answers when the disk has it; it sends the base a summary whenever there is a link, and needs none to go on. It outlives a power cut: started again it makes its map from the journal. The robot's own software reads on another socket where its sessions stand (agent/OUTPUT.md).

It runs until SIGTERM or an interrupt, also when standard input has ended.

Example, a robot of a fleet without keys, for a second and without a base:

  echo '{fleet: desk, robot: r1, dimension: 2, unsigned: true, bus: {url: "nats://127.0.0.1:14224"}, journal: r1-journal, intake: stdin, log: text}' > r1.yaml
  echo '{"event":"session"}' | timeout --preserve-status 1 selvage agent r1.yaml
`
}

// Run implements the verb.
func (c *agentCmd) Run(ctx context.Context, con *console) error {
	a, err := config.ReadAgent(c.Config)
	if err != nil {
		return err
	}
	client := con.client(a.Robot, func(bool) {})
	options := shell.Options{Fleet: a.Fleet, Robot: a.Robot, Tick: shellTick, Warn: con.complain}
	if client.Roots, err = authorities(a.Bus); err != nil {
		return err
	}
	if !a.Unsigned {
		pair, err := keys.Load(a.Keys.Seed)
		if err != nil {
			return err
		}
		ring, err := keys.NewRing(a.Keys.Base, nil)
		if err != nil {
			return badInput("%s: keys.base: %w", c.Config, err)
		}
		client.Key, options.Signer, options.Verifier = pair, pair, ring
	}
	con.runs(ctx, a.Log, a.Fleet)
	con.log = con.log.With().Str("robot", a.Robot).Logger()

	folder, err := journal.OS(a.Journal)
	if err != nil {
		return err
	}
	store, core, err := record.Open(folder, agentConfig(a))
	if err != nil {
		return unavailable("journal %s: %w", a.Journal, err)
	}
	defer func() {
		if err := store.Close(); err != nil {
			con.log.Error().Err(err).Msg("the journal was not closed well")
		}
	}()
	options.Store = store
	if torn := store.Torn(); torn > 0 {
		con.log.Warn().Int64("bytes", torn).Msg("a crash had left half a record behind; its line was never answered")
	}
	front := intake.Options{Robot: a.Robot, Dim: a.Dimension}
	for _, t := range core.Tracks() {
		front.Newest = max(front.Newest, t.Session)
	}
	if a.Metrics != "" {
		con.log.Warn().Str("metrics", a.Metrics).Msg("this version of the agent has no figures to ask for")
	}
	con.log.Info().Uint32("session", front.Newest).Str("journal", a.Journal).Msg("the journal is read")

	var socket, output net.Listener
	if a.Intake != "stdin" {
		if socket, err = intake.Listen(a.Intake); err != nil {
			return unavailable("intake: %w", err)
		}
		defer socket.Close()
	}
	if a.Output != "" {
		if output, err = intake.Listen(a.Output); err != nil {
			return unavailable("output: %w", err)
		}
		defer output.Close()
	}
	link, err := bus.Dial(a.Bus.URL, client)
	if err != nil {
		return unavailable("%w", err)
	}
	defer link.Close()
	s := shell.New(core, link, options)
	in := intake.New(front, s)
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	var wait sync.WaitGroup
	defer wait.Wait()
	out := newOutlet()
	wait.Go(func() { watchAgent(ctx, con, s, out) })
	if output != nil {
		wait.Go(func() {
			if err := out.serve(ctx, output); err != nil {
				con.log.Error().Err(err).Msg("nobody can connect to the output any more")
			}
		})
	}
	var failed error
	if socket != nil {
		wait.Go(func() {
			failed = in.Serve(ctx, socket, con.complain)
			stop()
		})
	} else {
		go func() { // a read of standard input does not end with ctx
			switch err := in.Run(ctx, os.Stdin, con.out); {
			case ctx.Err() != nil:
			case err != nil:
				con.log.Error().Err(err).Msg("standard input can not be read any more")
			default:
				con.log.Info().Msg("standard input has ended")
			}
		}()
	}
	s.Run(ctx)
	con.log.Info().Msg("stopping")
	wait.Wait()
	if failed != nil && !errors.Is(failed, net.ErrClosed) {
		return unavailable("intake: %w", failed)
	}
	return nil
}

func agentConfig(a *config.Agent) agent.Config {
	c := agent.DefaultConfig(a.Fleet, a.Robot, a.Dimension)
	rand.Read(c.Journal[:]) // of a new journal; it never fails
	for _, ns := range []*int64{&c.PublishNS, &c.SettleNS, &c.HeartbeatNS, &c.RetryNS, &c.AnswerNS} {
		*ns = a.Pace.Scale(*ns)
	}
	return c
}
