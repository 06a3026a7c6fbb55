package scenarios

import (
	"context"
	"fmt"
	"os"
	"slices"
	"sync"
	"time"

	"selvage/agent"
	agentshell "selvage/agent/shell"
	"selvage/coordinator"
	coordinatorshell "selvage/coordinator/shell"
	"selvage/internal/bus"
	"selvage/msgs"
)

// How the cores run on the real bus: nobody waits for a radio.
const (
	busTick      = 10 * time.Millisecond
	busSample    = time.Second
	busPatience  = 10 * time.Minute
	busPublishNS = int64(1e6)
	busSettleNS  = int64(100e6)
	busBeatNS    = int64(200e6)
	busRetryNS   = int64(500e6)
	busAnswerNS  = int64(10e9)
	busSolveNS   = int64(5e9)
	busPromptNS  = int64(10e6)
	busWarnings  = 100 // kept of each run
)

// OnBus runs an outing on the real message bus: every agent and the coordinator a process of its own within this one, a server
// embedded, the clock on the wall. Each agent gets all that its front end recorded at once, in the order of its times; the
// Link of the outing is ignored, since the bus is what it is. Times of the run count from its start. Two runs of the same outing are
// not the same byte for byte, since nothing orders the messages of different robots, but come to the same map.
//
// The run ends when everything is settled. When ctx ends, or 10 minutes after the start, it stops where it is.
func OnBus(ctx context.Context, o *Outing, set Settings) (*Run, error) {
	dir, err := os.MkdirTemp("", "selvage-bus-")
	if err != nil {
		return nil, fmt.Errorf("store of the bus: %w", err)
	}
	defer os.RemoveAll(dir)
	server, err := bus.Start(bus.Options{StoreDir: dir})
	if err != nil {
		return nil, err
	}
	defer server.Close()
	r := &busRun{
		runner: &runner{Run: &Run{Outing: o, Traffic: make([]Traffic, len(o.Feed)), HoldAll: set.HoldAll}, track: newTruthIndex(o.Survey)},
		begin:  time.Now(),
	}
	if err := r.run(ctx, server, set); err != nil {
		return nil, err
	}
	return r.Run, nil
}

// busRun is a run on the bus.
type busRun struct {
	*runner
	begin  time.Time
	agents []*agentshell.Shell
	base   *coordinatorshell.Shell

	mu sync.Mutex // of Refusals
}

// warn notes what a shell tells.
func (r *busRun) warn(who string) func(error) {
	return func(err error) {
		r.mu.Lock()
		defer r.mu.Unlock()
		if text := who + ": " + err.Error(); len(r.Refusals) < busWarnings && !slices.Contains(r.Refusals, text) {
			r.Refusals = append(r.Refusals, text)
		}
	}
}

// run starts everyone, waits for the end and stops everyone: then the cores belong to the run.
func (r *busRun) run(ctx context.Context, server *bus.Server, set Settings) (err error) {
	stop, cancel := context.WithCancel(context.Background())
	var wait sync.WaitGroup
	var clients []*bus.Client
	defer func() {
		cancel()
		wait.Wait()
		for _, c := range clients {
			c.Close()
		}
	}()
	connect := func(name string) (*bus.Client, error) {
		c, err := server.Connect(bus.ClientOptions{Name: name, Warn: r.warn(name)})
		if err == nil {
			clients = append(clients, c)
		}
		return c, err
	}

	dim := r.Outing.Survey.Meta.Dimension
	config := coordinator.DefaultConfig(fleetName, dim)
	config.HoldAll, config.Marks = set.HoldAll, known(r.Outing.Survey)
	config.SolveNS, config.PromptNS, config.RetryNS = busSolveNS, busPromptNS, busRetryNS
	r.Coordinator = coordinator.New(config)
	if err := rule(r.Coordinator, r.Outing.Survey); err != nil {
		return err
	}
	var names []string
	for i := range r.Outing.Survey.Robots {
		names = append(names, r.Outing.Survey.Robots[i].ID)
	}
	link, err := connect(Base)
	if err != nil {
		return err
	}
	r.base = coordinatorshell.New(r.Coordinator, link, coordinatorshell.Options{Fleet: fleetName, Robots: names, Tick: busTick, Warn: r.warn(Base)})
	failed := make(chan error, 1+len(names))
	wait.Go(func() {
		if err := r.base.Run(stop); err != nil {
			failed <- err
		}
	})
	if err := r.base.Do(stop, func(*coordinator.Coordinator) {}); err != nil { // once it runs there are streams to write to
		return <-failed
	}
	for _, id := range names {
		c := agent.DefaultConfig(fleetName, id, dim)
		c.Journal, c.HoldAll = journalOf(id), r.HoldAll
		c.PublishNS, c.SettleNS, c.HeartbeatNS, c.RetryNS, c.AnswerNS = busPublishNS, busSettleNS, busBeatNS, busRetryNS, busAnswerNS
		core := agent.New(c)
		r.Agents = append(r.Agents, core)
		link, err := connect(id)
		if err != nil {
			return err
		}
		s := agentshell.New(core, link, agentshell.Options{Fleet: fleetName, Robot: id, Tick: busTick, Warn: r.warn(id)})
		r.agents = append(r.agents, s)
		wait.Go(func() { s.Run(stop) })
	}
	var measured sync.WaitGroup
	for i := range r.agents {
		measured.Go(func() {
			if err := r.measure(ctx, i); err != nil && ctx.Err() == nil {
				failed <- fmt.Errorf("robot %s: %w", names[i], err)
			}
		})
	}
	all := make(chan struct{})
	wait.Go(func() { measured.Wait(); close(all) })
	err = r.watch(ctx, set, all, failed)
	select {
	case cause := <-failed: // rather than that somebody could not be asked any more
		err = cause
	default:
	}
	return err
}

// measure gives a robot all that its front end delivers.
func (r *busRun) measure(ctx context.Context, robot int) error {
	events := make([]agent.Event, len(r.Outing.Feed[robot]))
	for k, e := range r.Outing.Feed[robot] {
		var err error
		if events[k], err = FrontEnd(r.Outing.Survey, robot, e); err != nil {
			return err
		}
	}
	return r.agents[robot].Measure(ctx, events...)
}

// watch takes samples until the run is at its end.
func (r *busRun) watch(ctx context.Context, set Settings, measured <-chan struct{}, failed <-chan error) error {
	tick := time.NewTicker(busTick)
	defer tick.Stop()
	late := time.NewTimer(busPatience)
	defer late.Stop()
	// Looking at the cores must not hang on ctx: it is what ends the run, and the state at its end is wanted.
	look := context.Background()
	if err := r.look(look, set); err != nil {
		return err
	}
	next := busSample
	for {
		select {
		case err := <-failed:
			return err
		case <-ctx.Done():
			r.Interrupted = true
			return r.end(look, set)
		case <-late.C:
			return r.end(look, set)
		case <-measured:
			measured = nil
			if err := r.base.Do(look, func(c *coordinator.Coordinator) { r.before = c.Epoch().Number }); err != nil {
				return err
			}
		case <-tick.C:
			if time.Since(r.begin) >= next {
				next += busSample
				if err := r.look(look, set); err != nil {
					return err
				}
			}
			if measured != nil {
				continue
			}
			settled, err := r.settled(look)
			if err != nil {
				return err
			}
			if settled {
				r.Settled = true
				return r.end(look, set)
			}
		}
	}
}

// settled asks everyone. The coordinator is asked before and after the agents: what an agent sent in between unsettles it, or
// makes an epoch that the agent has not applied.
func (r *busRun) settled(ctx context.Context) (bool, error) {
	base := func() (settled bool, epoch msgs.Epoch, err error) {
		err = r.base.Do(ctx, func(c *coordinator.Coordinator) { settled, epoch = c.Settled(), c.Epoch() })
		return settled && r.base.Sent(), epoch, err
	}
	before, epoch, err := base()
	if !before || err != nil {
		return false, err
	}
	for _, s := range r.agents {
		settled := false
		if err := s.Do(ctx, func(a *agent.Agent) { settled = a.Settled() }); err != nil {
			return false, err
		}
		if !settled || !s.Sent() {
			return false, nil
		}
	}
	after, last, err := base()
	return after && last == epoch, err
}

// look takes a sample and tells of it.
func (r *busRun) look(ctx context.Context, set Settings) error {
	for i, s := range r.agents {
		r.Traffic[i] = Traffic(s.Traffic())
	}
	held := 0
	err := r.base.Do(ctx, func(*coordinator.Coordinator) {
		r.EndNS = int64(time.Since(r.begin))
		r.sample(r.EndNS)
		held = r.held()
	})
	if err == nil && set.Progress != nil {
		set.Progress(Progress{NowNS: r.EndNS, EndNS: r.EndNS, Joined: r.Samples[len(r.Samples)-1].Joined, Held: held})
	}
	return err
}

// end takes the last sample.
func (r *busRun) end(ctx context.Context, set Settings) error {
	if err := r.look(ctx, set); err != nil {
		return err
	}
	return r.base.Do(ctx, func(c *coordinator.Coordinator) { r.Rounds = int(c.Epoch().Number - r.before) })
}
