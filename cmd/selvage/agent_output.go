package main

import (
	"context"
	"encoding/json"
	"net"
	"slices"
	"sync"
	"time"

	"selvage/agent"
	"selvage/agent/shell"
	"selvage/internal/lie"
	"selvage/msgs"
)

// placeLine is what the consumers on a robot get of each session; agent/OUTPUT.md describes it.
type placeLine struct {
	Epoch               string    `json:"epoch"`
	Session             uint32    `json:"session"`
	Joined              bool      `json:"joined"`
	Datum               string    `json:"datum"`
	DatumFromSession    *poseLine `json:"datum_from_session"`
	Keyframe            int64     `json:"keyframe"`
	SessionFromKeyframe *poseLine `json:"session_from_keyframe"`
}

type poseLine struct {
	X  float64 `json:"x_m"`
	Y  float64 `json:"y_m"`
	Z  float64 `json:"z_m"`
	QX float64 `json:"qx"`
	QY float64 `json:"qy"`
	QZ float64 `json:"qz"`
	QW float64 `json:"qw"`
}

func poseOf(x *lie.SE3) *poseLine {
	q := x.Quat()
	return &poseLine{x.T[0], x.T[1], x.T[2], q[0], q[1], q[2], q[3]}
}

// watchAgent tells the log and the outlet where the sessions of a robot stand, at first and whenever a correction has changed that.
func watchAgent(ctx context.Context, con *console, s *shell.Shell, out *outlet) {
	ticker := time.NewTicker(time.Second / 5)
	defer ticker.Stop()
	var last msgs.Epoch
	var stood []agent.Place
	for {
		var now msgs.Epoch
		var places []agent.Place
		if s.Do(ctx, func(a *agent.Agent) { now, places = a.Applied(), a.Places() }) != nil {
			return
		}
		if now != last || !slices.EqualFunc(stood, places, func(a, b agent.Place) bool {
			return a.Session == b.Session && a.Joined == b.Joined && a.Island == b.Island
		}) {
			var text []byte
			for i := range places {
				p := &places[i]
				line := placeLine{Epoch: epochText(now), Session: p.Session, Joined: p.Joined, Datum: p.Island, Keyframe: p.Keyframe, SessionFromKeyframe: poseOf(&p.SessionFromKeyframe)}
				if p.Joined {
					line.DatumFromSession = poseOf(&p.DatumFromSession)
				}
				b, err := json.Marshal(&line)
				if err != nil {
					con.log.Error().Err(err).Msg("a place can not be written")
					continue
				}
				text = append(append(text, b...), '\n')
				con.log.Info().Str("epoch", line.Epoch).Uint32("session", p.Session).Bool("joined", p.Joined).Str("datum", p.Island).Msg("map changed")
			}
			out.put(text)
			last, stood = now, places
		}
		select {
		case <-ctx.Done():
			return
		case <-ticker.C:
		}
	}
}

// outlet hands the newest lines to whoever is connected. One who is slow misses what was replaced meanwhile.
type outlet struct {
	mu      sync.Mutex
	text    []byte
	changed chan struct{} // closed when there is a newer text
}

func newOutlet() *outlet { return &outlet{changed: make(chan struct{})} }

func (o *outlet) put(text []byte) {
	o.mu.Lock()
	defer o.mu.Unlock()
	o.text = text
	close(o.changed)
	o.changed = make(chan struct{})
}

// Bounds on consumers.
const (
	maxConsumers = 16
	stalled      = 5 * time.Second // one who takes nothing for so long is hung up on
)

// serve hands lines to all who connect, until ctx ends. Then it closes the listener and waits for what it started.
func (o *outlet) serve(ctx context.Context, l net.Listener) error {
	var wait sync.WaitGroup
	defer wait.Wait()
	stop := context.AfterFunc(ctx, func() { l.Close() })
	defer stop()
	places := make(chan struct{}, maxConsumers)
	for {
		c, err := l.Accept()
		if ctx.Err() != nil {
			if err == nil {
				c.Close()
			}
			return nil
		}
		if err != nil {
			l.Close()
			return err
		}
		select {
		case places <- struct{}{}:
		default:
			c.Close()
			continue
		}
		wait.Go(func() {
			defer func() { <-places }()
			o.feed(ctx, c)
		})
	}
}

// feed hands lines to one consumer, until it hangs up or ctx ends. What it says is not listened to.
func (o *outlet) feed(ctx context.Context, c net.Conn) {
	ctx, cancel := context.WithCancel(ctx)
	defer cancel()
	var wait sync.WaitGroup
	defer wait.Wait()
	defer context.AfterFunc(ctx, func() { c.Close() })()
	defer c.Close()
	wait.Go(func() {
		defer cancel()
		for b := make([]byte, 512); ; {
			if _, err := c.Read(b); err != nil {
				return
			}
		}
	})
	for {
		o.mu.Lock()
		text, changed := o.text, o.changed
		o.mu.Unlock()
		if err := c.SetWriteDeadline(time.Now().Add(stalled)); err != nil {
			return
		}
		if _, err := c.Write(text); err != nil {
			return
		}
		select {
		case <-changed:
		case <-ctx.Done():
			return
		}
	}
}
