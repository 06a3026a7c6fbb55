package main

import (
	"context"
	"encoding/json"
	"errors"
	"net"
	"net/http"
	"slices"
	"sync"
	"sync/atomic"
	"time"

	"selvage/coordinator"
	"selvage/coordinator/shell"
	"selvage/msgs"
)

// seat is where the coordinator sits that leads, when one does.
type seat struct {
	linked atomic.Bool // with the bus

	mu     sync.Mutex
	term   uint64
	shell  *shell.Shell // nil while this computer does not lead
	robots []string
}

func (s *seat) take(term uint64, leads *shell.Shell, robots []string) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.term, s.shell, s.robots = term, leads, robots
}

// fleetStatus is what selvage status shows; the object of --json and of /status.json.
type fleetStatus struct {
	Fleet  string        `json:"fleet"`
	Holder string        `json:"holder"` // the computer that answers
	Leads  bool          `json:"leads"`  // it speaks for the fleet; all below is empty otherwise
	Term   uint64        `json:"term"`
	Epoch  string        `json:"epoch"` // of the newest solution: incarnation of the store, and number
	Rests  bool          `json:"rests"` // all that came is in it, and every robot has answered
	Robots []robotStatus `json:"robots"`
	Ties   tieCounts     `json:"ties"`
	Doubts []doubt       `json:"doubts"` // ties that are open, in the order they came
}

type robotStatus struct {
	Robot    string          `json:"robot"`
	NewsS    *float64        `json:"news_s"`  // seconds since its newest message; null when none has come
	Applied  string          `json:"applied"` // epoch of the newest correction that it has applied; empty before the first
	Waiting  int             `json:"waiting"` // keyframes that ties touch and that its summary does not have yet
	Gaps     bool            `json:"gaps"`    // ties that it has told of have not come yet
	Sessions []sessionStatus `json:"sessions"`
}

type sessionStatus struct {
	Session uint32 `json:"session"`
	Joined  bool   `json:"joined"`
	Datum   string `json:"datum"` // names the frame that it shares; empty when it is not joined
}

type tieCounts struct {
	Held    int `json:"held"`
	Open    int `json:"open"`
	Refused int `json:"refused"`
}

type doubt struct {
	Tie    string `json:"tie"`
	From   string `json:"from"`
	To     string `json:"to"`
	Reason string `json:"reason"` // and what would settle it
}

// status looks at the coordinator that leads.
func (s *seat) status(ctx context.Context, b *base) (*fleetStatus, error) {
	s.mu.Lock()
	term, leads, robots := s.term, s.shell, s.robots
	s.mu.Unlock()
	f := &fleetStatus{Fleet: b.Fleet, Holder: b.Holder, Leads: leads != nil, Robots: []robotStatus{}, Doubts: []doubt{}}
	if leads == nil {
		return f, nil
	}
	f.Term = term
	heard, err := leads.Heard(ctx)
	if err != nil {
		return nil, err
	}
	var standings []coordinator.Standing
	var units []coordinator.Placed
	var findings []coordinator.Finding
	err = leads.Do(ctx, func(c *coordinator.Coordinator) {
		f.Epoch, f.Rests = epochText(c.Epoch()), c.Settled()
		standings, units, findings = c.Standings(), c.Map(), c.Findings()
	})
	if err != nil {
		return nil, err
	}
	now := time.Now()
	for _, name := range slices.Sorted(slices.Values(robots)) {
		r := robotStatus{Robot: name, Sessions: []sessionStatus{}}
		if at := heard[name]; at != 0 {
			age := max(now.Sub(time.Unix(0, at)), 0).Round(time.Millisecond).Seconds()
			r.NewsS = &age
		}
		for _, x := range standings {
			if x.Robot == name {
				r.Waiting, r.Gaps = x.Missing, x.Gaps
				if x.Applied != (msgs.Epoch{}) {
					r.Applied = epochText(x.Applied)
				}
			}
		}
		for i := range units {
			if u := &units[i]; u.Robot == name {
				r.Sessions = append(r.Sessions, sessionStatus{u.Session, u.Joined, u.Island})
			}
		}
		f.Robots = append(f.Robots, r)
	}
	for i := range findings {
		switch x := &findings[i]; x.Verdict {
		case msgs.Held:
			f.Ties.Held++
		case msgs.Refused:
			f.Ties.Refused++
		default:
			f.Ties.Open++
			f.Doubts = append(f.Doubts, doubt{x.Tie, x.From.Robot, x.To.Robot, x.Reason})
		}
	}
	return f, nil
}

// answer serves what can be asked for, until ctx ends: /healthz says in a word whether the coordinator is at work, /status.json where the
// fleet stands.
func (s *seat) answer(ctx context.Context, con *console, b *base) (wait func(), err error) {
	l, err := net.Listen("tcp", b.Metrics)
	if err != nil {
		return nil, unavailable("metrics: %w", err)
	}
	mux := http.NewServeMux()
	mux.HandleFunc("GET /healthz", func(w http.ResponseWriter, r *http.Request) {
		ctx, cancel := context.WithTimeout(r.Context(), 2*time.Second)
		defer cancel()
		s.mu.Lock()
		leads := s.shell
		s.mu.Unlock()
		switch {
		case !s.linked.Load():
			http.Error(w, "no bus", http.StatusServiceUnavailable)
		case leads == nil:
			w.Write([]byte("waits\n"))
		case leads.Do(ctx, func(*coordinator.Coordinator) {}) != nil:
			w.Write([]byte("solves\n")) // it does not look up until it is done
		default:
			w.Write([]byte("leads\n"))
		}
	})
	mux.HandleFunc("GET /status.json", func(w http.ResponseWriter, r *http.Request) {
		ctx, cancel := context.WithTimeout(r.Context(), 20*time.Second)
		defer cancel()
		f, err := s.status(ctx, b)
		if err != nil {
			http.Error(w, "busy with a solution", http.StatusServiceUnavailable)
			return
		}
		w.Header().Set("Content-Type", "application/json")
		json.NewEncoder(w).Encode(f)
	})
	server := &http.Server{Handler: mux, ReadHeaderTimeout: 5 * time.Second, IdleTimeout: time.Minute, MaxHeaderBytes: 16 << 10}
	var wg sync.WaitGroup
	wg.Go(func() {
		if err := server.Serve(l); !errors.Is(err, http.ErrServerClosed) {
			con.log.Error().Err(err).Msg("nobody can ask for the status any more")
		}
	})
	stop := context.AfterFunc(ctx, func() { server.Close() })
	return func() { stop(); server.Close(); wg.Wait() }, nil
}
