package main

import (
	"context"
	"os"
	"os/signal"
	"sync"
	"syscall"
	"time"

	"selvage/coordinator"
	"selvage/coordinator/shell"
	"selvage/internal/bus"
)

type coordinateCmd struct {
	Config string `arg:"" help:"Configuration of the base, base.yaml."`
}

func (coordinateCmd) Help() string {
	return `Runs the coordinator of a fleet, with the bus (section serve of base.yaml) or on one that runs elsewhere (section bus). Of several coordinators on one bus one speaks, and another one takes over some seconds after it has stopped. What is known is on the bus: a coordinator that was killed goes on from there.

It runs until SIGTERM or an interrupt. At SIGHUP it reads again who is enrolled, ends the connections of robots that are revoked, and begins a new term.

Example, a fleet without keys on one desk, for two seconds:

  echo '{fleet: desk, dimension: 2, unsigned: true, robots: [r1, r2], serve: {listen: "127.0.0.1:14223", store: desk}, holder: desk, log: text}' > desk.yaml
  timeout --preserve-status 2 selvage coordinate desk.yaml
`
}

const (
	leaseTTL  = 3 * time.Second
	shellTick = 50 * time.Millisecond
)

// Run implements the verb.
func (c *coordinateCmd) Run(ctx context.Context, con *console) error {
	again := make(chan os.Signal, 1)
	signal.Notify(again, syscall.SIGHUP)
	b, err := readBase(c.Config)
	if err != nil {
		return err
	}
	if err := b.identify(); err != nil {
		return err
	}
	con.runs(ctx, b.Log, b.Fleet)
	if b.Page != "" {
		con.log.Warn().Str("page", b.Page).Msg("this version has no live page")
	}
	var at seat
	if b.Metrics != "" {
		wait, err := at.answer(ctx, con, b)
		if err != nil {
			return err
		}
		defer wait()
	}
	server, link, err := c.link(ctx, con, b, &at)
	if ctx.Err() != nil && link == nil {
		return nil // told to stop before it began
	}
	if err != nil {
		return err
	}
	if server != nil {
		defer server.Close()
	}
	defer link.Close()
	for ctx.Err() == nil {
		term, end := context.WithCancel(ctx)
		ended := make(chan error, 1)
		go func() { ended <- shell.Lead(term, link, b.leadership(term, con, &at)) }()
		for term.Err() == nil {
			select {
			case <-again:
				if b.readmit(con, server) {
					end()
				}
			case err := <-ended:
				ended <- err
				end()
			case <-ctx.Done():
				con.log.Info().Msg("stopping")
			}
		}
		end()
		if err := <-ended; err != nil {
			return unavailable("the bus: %w", err)
		}
	}
	return nil
}

// link connects to the bus, here or elsewhere, and waits until it is there.
func (c *coordinateCmd) link(ctx context.Context, con *console, b *base, at *seat) (*bus.Server, *bus.Client, error) {
	there := make(chan struct{}, 1)
	o := con.client("base", func(is bool) {
		if at.linked.Store(is); !is {
			return
		}
		select {
		case there <- struct{}{}:
		default:
		}
	})
	if b.pair != nil {
		o.Key = b.pair
	}
	if b.Serve.Listen != "" {
		server, err := b.serve(con)
		if err != nil {
			return nil, nil, err
		}
		link, err := server.Connect(o)
		if err != nil {
			server.Close()
			return nil, nil, unavailable("%w", err)
		}
		return server, link, nil
	}
	var err error
	if o.Roots, err = authorities(b.Bus); err != nil {
		return nil, nil, err
	}
	link, err := bus.Dial(b.Bus.URL, o)
	if err != nil {
		return nil, nil, unavailable("%w", err)
	}
	select {
	case <-there:
		return nil, link, nil
	case <-ctx.Done():
		link.Close()
		return nil, nil, ctx.Err()
	case <-time.After(20 * time.Second):
		link.Close()
		return nil, nil, unavailable("no connection to the bus at %s within 20 s", b.Bus.URL)
	}
}

// leadership says how this computer leads, with those who are enrolled by now.
func (b *base) leadership(ctx context.Context, con *console, at *seat) shell.Leadership {
	log, robots := con.log, b.robots()
	var watched sync.WaitGroup
	var unwatch context.CancelFunc
	o := shell.Leadership{
		Options: shell.Options{Fleet: b.Fleet, Robots: robots, Tick: shellTick, Warn: con.complain},
		Holder:  b.Holder,
		TTL:     leaseTTL,
		Core: func(from coordinator.Config) *coordinator.Coordinator {
			c := coordinator.DefaultConfig(b.Fleet, b.Dimension)
			c.Term, c.Incarnation, c.Epoch, c.History = from.Term, from.Incarnation, from.Epoch, from.History
			for _, ns := range []*int64{&c.SolveNS, &c.PromptNS, &c.RetryNS} {
				*ns = b.Pace.Scale(*ns)
			}
			return coordinator.New(c)
		},
		Leads: func(term uint64, s *shell.Shell) {
			at.take(term, s, robots)
			if s == nil {
				unwatch()
				watched.Wait()
				log.Info().Uint64("term", term).Msg("does not lead any more")
				return
			}
			log.Info().Uint64("term", term).Str("holder", b.Holder).Msg("leads")
			var watch context.Context
			watch, unwatch = context.WithCancel(ctx)
			watched.Go(func() { watchCoordinator(watch, con, term, s) })
		},
	}
	if !b.Unsigned {
		o.Signer, o.Verifier = b.pair, b.ring
	}
	return o
}
